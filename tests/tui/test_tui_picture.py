"""The full-screen picture: cursor, zoom, reading a star, comparing frames; and what it costs on the wire."""

from dataclasses import replace

import pytest
from fake_desk import FakeDesk, invented_readings, invented_snapshot
from on_screen import SIZES, check_golden, screen_text, settle
from rich.color import ColorSystem

from reduce.plain_text import PlainError
from tui.actions import actions_of
from tui.app import FadelineApp
from tui.picture_view import aperture_px, next_star, other_frame, rings_of, star_near, star_text, uncrowded
from tui.screens.frames import FramesScreen
from tui.screens.picture import PictureScreen
from tui.widgets.delta import changed_runs, row_of_cells, written
from tui.widgets.preview import Ring

REFERENCE = "ref_R.fits"


def with_reference() -> FakeDesk:
    """The invented campaign with one frame of the reference folder."""
    snapshot = invented_snapshot()
    like = next(f for f in snapshot.frames if f.band == "R")
    reference = replace(like, id="r" * 64, file=REFERENCE, path=f"/reference/{REFERENCE}", kind="reference", state=None)
    return FakeDesk(replace(snapshot, frames=(reference, *snapshot.frames)))


async def opened(pilot, *keys: str) -> PictureScreen:
    """The picture of n11_R_1.fits, after more keys."""
    await settle(pilot)
    await pilot.press("2", *["up"] * 4)
    for key in ("v", *keys):
        await pilot.press(key)
        await settle(pilot)
    assert isinstance(pilot.app.screen, PictureScreen)
    return pilot.app.screen


# ---- on numbers ------------------------------------------------------------------------------------------


def test_the_other_frame_is_the_reference_or_the_sharpest_of_another_night() -> None:
    desk = with_reference()
    row = next(f for f in desk.now.frames if f.file == "n03_R_0.fits")
    assert other_frame(desk.now.frames, row).file == REFERENCE
    without = [f for f in desk.now.frames if f.kind != "reference"]
    other = other_frame(without, row)
    assert other.band == "R"
    assert other.night != row.night
    elsewhere = [f for f in without if f.band == "R" and f.night != row.night and f.state == "kept"]
    assert other.fwhm_arcsec == min(f.fwhm_arcsec for f in elsewhere)
    assert other_frame(without, replace(row, solution=None)) is None, "a frame without a field cannot be laid on"
    assert other_frame([row], row) is None


def test_rings_have_the_radius_of_the_aperture() -> None:
    row = next(f for f in invented_snapshot().frames if f.file == "n03_R_0.fits")
    assert aperture_px(row) == pytest.approx(1.5 * row.fwhm_arcsec / 0.763)
    assert aperture_px(replace(row, zero_point=None)) == 0.0
    assert [(r.brackets, r.x_px) for r in rings_of(row, "Vesna 7")] == [("[]", 120.0), ("[]", 400.0), ("()", 260.0)]


def test_in_a_crowd_only_the_target_is_marked_until_one_looks_nearer() -> None:
    stars = [Ring(10.0 * k, 10.0 * k, "[]", "") for k in range(20)]
    rings = [*stars, Ring(50.0, 50.0, "()", "")]
    assert uncrowded(rings, (0, 0, 200, 200), 100, 16) == rings[-1:]
    assert uncrowded(rings, (0, 0, 200, 200), 400, 16) == rings
    assert uncrowded(rings, (0, 0, 35, 35), 100, 16) == rings, "four of them are in the window"


def test_a_star_is_meant_when_the_cursor_is_near_and_the_nearest_counts() -> None:
    stars = invented_readings("Vesna 7")
    assert star_near(stars, 262.0, 249.0, 5.0).name == "Vesna 7"
    assert star_near(stars, 266.0, 249.0, 5.0) is None
    assert star_near((), 0.0, 0.0, 5.0) is None
    assert [next_star(stars, 0.0, 0.0, 1).name, next_star(stars, 260.0, 250.0, 1).name] == ["Vesna 7", "C1"]
    assert next_star(stars, 260.0, 250.0, -1).name == "C2"
    assert next_star(stars[3:], 0.0, 0.0, 1) is None, "a star without a name is not visited"


def test_a_reading_says_what_is_wrong_with_the_star_and_nothing_when_unknown() -> None:
    stars = {s.name: s for s in invented_readings("Vesna 7")}
    text = star_text(stars["C2"]).plain
    assert "16.000 ± 0.030 mag" in text
    assert "S/N 50" in text
    assert text.endswith("saturated")
    unknown = replace(stars["C1"], mag=None, snr=None, fwhm_arcsec=None)
    assert "no magnitude" in star_text(unknown).plain
    assert "nan" not in star_text(unknown).plain.lower()


# ---- on the screen ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", SIZES, ids=["80x24", "160x48"])
async def test_picture_looks_as_agreed(size: tuple[int, int]) -> None:
    app = FadelineApp(with_reference())
    async with app.run_test(size=size) as pilot:
        await opened(pilot)
        check_golden(f"picture_{size[0]}x{size[1]}", screen_text(app))
        await pilot.press("t", "enter")
        await settle(pilot)
        check_golden(f"picture_star_{size[0]}x{size[1]}", screen_text(app))


@pytest.mark.parametrize("key", ["m", "p"], ids=["dots", "plain"])
async def test_dots_and_plain_characters_show_the_same_frame(key: str) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, key)
        check_golden(f"picture_{'dots' if key == 'm' else 'plain'}", screen_text(app))
        assert "▀" not in screen_text(app)


async def test_no_label_of_the_footer_is_clipped() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot)
        footer = screen_text(app).splitlines()[-1]
        own = [action for action in actions_of("picture") if action.in_footer and "picture" in action.screens]
        assert all(f"{action.key_shown} {action.label}" in footer for action in own)
        assert footer.endswith("^p All")


async def test_help_of_the_picture_tells_its_own_keys() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 48)) as pilot:
        await opened(pilot)
        await pilot.press("question_mark")
        await settle(pilot)
        text = screen_text(app)
        assert "Picture" in text
        assert "Read the star at the cursor." in text


async def test_enter_reads_the_star_at_the_cursor_and_draws_its_profile() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "enter")
        text = screen_text(app)
        assert "Vesna 7  15.200 ± 0.010 mag  S/N 90  peak 4213 ADU" in text
        assert "ADU above sky" in text
        assert "FWHM" in text
        await pilot.press(*["up"] * 8)
        await settle(pilot)
        assert "15.200" not in screen_text(app), "a reading never stands beside another place"
        await pilot.press("enter")
        await settle(pilot)
        assert "No measured star at the cursor." in screen_text(app)


async def test_full_stop_goes_from_star_to_star_and_the_picture_follows() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        screen = await opened(pilot, "plus", "plus", "plus", "full_stop")
        assert screen.query_one("#picture").place().holds(*screen.query_one("#picture").place().cell_of(120.0, 400.0))
        assert "C1  15.600" in screen_text(app)
        await pilot.press("full_stop")
        await settle(pilot)
        assert "C2" in screen_text(app)
        assert "saturated" in screen_text(app)


async def test_zoom_shows_half_as_much_and_zero_shows_all() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "plus", "plus")
        windows = [window for _, window, _ in desk.previews]
        heights = [window[3] for window in windows if window is not None]
        assert heights[-2:] == [256, 128]
        assert "×4" in screen_text(app)
        await pilot.press("0")
        await settle(pilot)
        assert "whole frame" in screen_text(app)


async def test_the_picture_moves_on_at_its_edge() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "plus", "plus", "plus")
        before = desk.previews[-1][1]
        await pilot.press(*["shift+right"] * 4)
        await settle(pilot)
        after = desk.previews[-1][1]
        assert after[0] > before[0]
        assert after[1:] == before[1:]
        await pilot.press(*["shift+right"] * 40)
        await settle(pilot)
        x0, _, columns, _ = desk.previews[-1][1]
        assert x0 + columns == 512


async def test_blink_lays_the_reference_on_the_frame_then_shows_the_difference() -> None:
    desk = with_reference()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "b")
        assert desk.previews[-1][2] == f"/reference/{REFERENCE}"
        assert f"Reference {REFERENCE} of" in screen_text(app)
        assert "laid on n11_R_1.fits" in screen_text(app)
        laid = screen_text(app)
        await pilot.press("b")
        await settle(pilot)
        assert desk.previews[-1][2] == "difference"
        assert "minus its reference" in screen_text(app)
        assert "×4" in screen_text(app), "it is known about the target only"
        assert "[" not in screen_text(app), "stars that were taken off need no marks"
        asked = len(desk.previews)
        await pilot.press("b", "b", "b")
        await settle(pilot)
        assert len(desk.previews) == asked + 2, "going to and fro fetches nothing again"
        await pilot.press("0", "b", "b")
        await settle(pilot)
        assert screen_text(app) == laid


async def test_a_difference_that_cannot_be_made_is_a_sentence_and_the_frame_again() -> None:
    desk = with_reference()
    desk.refuse["difference"] = PlainError("The frame shares no usable star with the reference.")
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "b", "b")
        text = screen_text(app)
        assert "The frame shares no usable star with the reference." in text
        assert "minus its reference" not in text


async def test_keep_and_drop_work_on_the_picture_and_escape_leaves() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot, "d")
        assert desk.decisions == [(desk.decisions[0][0], "state", "drop")]
        assert "dropped" in screen_text(app).splitlines()[0]
        await pilot.press("u")
        await settle(pilot)
        assert "dropped" not in screen_text(app).splitlines()[0]
        await pilot.press("pageup")
        await settle(pilot)
        assert "n11_R_0.fits" in screen_text(app)
        await pilot.press("escape")
        await settle(pilot)
        assert isinstance(app.screen, FramesScreen)


async def test_an_unreadable_file_is_a_sentence_and_no_key_breaks_it() -> None:
    desk = FakeDesk()
    frames = tuple(replace(f, path="/frames/half.fits") for f in desk.now.frames)
    desk.change(frames=frames)
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot)
        assert "half.fits holds 4196160 of 8392320 bytes: copy it" in screen_text(app)
        keys = [action.key.split(",")[0] for action in actions_of("picture") if "picture" in action.screens]
        await pilot.press(*(key for key in keys if key != "escape"))
        await settle(pilot)
        assert isinstance(app.screen, PictureScreen)


async def test_a_tiny_terminal_does_not_break_the_picture() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(20, 6)) as pilot:
        await opened(pilot, "plus", "right", "enter", "b", "minus")


async def test_moving_the_cursor_is_cheap_and_a_picture_fits_six_kilobytes() -> None:
    """The bounds of the terminal app at 80x24 in 256 colours: cursor 200 B, preview 6 kB."""

    def rows():
        strips = app.screen._compositor.render_strips()
        return [row_of_cells(strip, ColorSystem.EIGHT_BIT) for strip in strips]

    def cost(old, new) -> int:
        return len(written((y, x, c) for y, row in enumerate(new) for x, c in changed_runs(old[y], row)).encode())

    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await opened(pilot)
        before = rows()
        for key in ("right", "up", "left", "down"):
            await pilot.press(key)
            await settle(pilot)
            after = rows()
            assert 0 < cost(before, after) <= 200
            before = after
        await pilot.press("plus")
        await settle(pilot)
        after = rows()
        assert cost(before, after) <= 6000
        before = after
        await pilot.press("pageup")
        await settle(pilot)
        assert cost(before, rows()) <= 6000
