"""What people decide reaches the desk, shows at once, and can be taken back."""

from dataclasses import replace

from fake_desk import FakeDesk, invented_snapshot
from on_screen import screen_text, settle
from textual.widgets import Input

from reduce.plain_text import PlainError
from tui.app import FadelineApp
from tui.widgets.row_table import RowTable


async def test_excluding_a_point_moves_the_modulus_and_restoring_brings_it_back() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        before = app.view.estimate.mu
        await pilot.press("4", "left", "left", "x")
        await settle(pilot)
        assert app.desk.decisions == [("point:Vesna 7:2031-05-27:R", "exclude", "yes")]
        excluded = app.view.estimate.mu
        assert excluded != before
        assert f"μ {excluded:.3f}" in screen_text(app)
        assert "excluded" in screen_text(app)
        await pilot.press("x")
        await settle(pilot)
        assert app.desk.decisions[-1] == ("point:Vesna 7:2031-05-27:R", "exclude", "no")
        assert app.view.estimate.mu == before


async def test_exclude_without_a_point_asks_for_one() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("4", "x")
        await settle(pilot)
        assert app.desk.decisions == []
        assert "Choose a point first" in screen_text(app)


async def test_keep_drop_and_undo() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "up", "up", "d")
        await settle(pilot)
        name = app.desk.decisions[0][0]
        assert app.desk.decisions[0][1:] == ("state", "drop")
        assert next(f for f in app.snapshot.frames if f"frame:{f.id}" == name).state == "dropped"
        assert "dropped by a person" in screen_text(app)
        await pilot.press("u")
        await settle(pilot)
        assert app.desk.decisions == []
        assert "Taken back" in screen_text(app)
        await pilot.press("u")
        await settle(pilot)
        assert "There is nothing to take back." in screen_text(app)


async def test_calibration_frames_are_not_decided_on() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "f", "f", "ctrl+end", "d")
        await settle(pilot)
        assert app.desk.decisions == []
        assert "not for calibration frames" in screen_text(app)
        assert "Dark: missing" in screen_text(app)


async def test_frame_filter_shows_what_wants_somebody() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "f")
        await settle(pilot)
        assert list(app.screen.query_one(RowTable)._shown) == ["054" + "a" * 61, "z1", "z2"]


async def test_set_aside_and_use_again() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("3", "down", "s")
        await settle(pilot)
        assert app.desk.decisions == [("star:C2", "use", "set aside")]
        await pilot.press("s")
        await settle(pilot)
        assert app.desk.decisions[-1] == ("star:C2", "use", "use")


async def test_aperture_is_chosen_for_the_shown_band() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("3", "b", "a")
        await settle(pilot)
        await pilot.press("down", "down", "down", "down", "enter")
        await settle(pilot)
        assert app.desk.decisions == [("aperture:R", "fwhm", "1")]
        await pilot.press("a", "escape")
        await settle(pilot)
        assert len(app.desk.decisions) == 1


async def test_note_is_stored_for_the_chosen_target_and_found_again() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("right_square_bracket", "n")
        await settle(pilot)
        await pilot.press(*"dew 12", "enter")
        await settle(pilot)
        assert app.current_mode == "log"
        assert app.snapshot.log[-1].body == "dew 12"
        assert app.snapshot.log[-1].target == "Liskova 2"
        await pilot.press("slash", *"cirrus", "enter")
        await settle(pilot)
        assert "Thin cirrus" in screen_text(app)
        assert "dew 12" not in screen_text(app)
        await pilot.press("slash", "escape")
        await settle(pilot)
        assert "dew 12" in screen_text(app)


async def test_empty_note_is_refused_and_no_cursor_blinks() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("n")
        await settle(pilot)
        assert not any(box.cursor_blink for box in app.screen.query(Input))
        await pilot.press("enter")
        await settle(pilot)
        assert len(app.snapshot.log) == 3
        assert "An empty note is not stored." in screen_text(app)


async def test_refused_decision_is_a_sentence() -> None:
    desk = FakeDesk()
    desk.refuse["decide"] = PlainError("The disk is full: free some space.")
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "d")
        await settle(pilot)
        assert "The disk is full: free some space." in screen_text(app)
        assert desk.decisions == []


async def test_a_frame_without_a_measurement_cannot_be_kept() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "k")
        await settle(pilot)
        assert "no measurement to keep" in screen_text(app)
        assert desk.decisions == []


async def test_new_frames_appear_and_the_cursor_stays() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "ctrl+home", "down", "down")
        await settle(pilot)
        table = app.screen.query_one(RowTable)
        chosen, top, n = table.chosen(), table.scroll_offset, table.row_count
        early = replace(desk.now.frames[0], id="early", file="early.fits")
        late = replace(desk.now.frames[0], id="late", file="late.fits")
        desk.change(frames=(*desk.now.frames, late))
        app._nudge.set()
        await settle(pilot)
        assert (table.chosen(), table.scroll_offset, table.row_count) == (chosen, top, n + 1)
        desk.change(frames=(early, *desk.now.frames))
        app._nudge.set()
        await settle(pilot)
        assert (table.chosen(), table.row_count) == (chosen, n + 2)
        assert table.get_row_index("early") == 0


async def test_point_cursor_stays_on_its_point_when_points_arrive() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("4", "left", "left", "left")
        await settle(pilot)
        before = app.screen._chosen()
        view = desk.now.targets[0]
        new = replace(view.night_points[0], night="2031-05-01", mjd=before.mjd - 1.0)
        desk.change(targets=(replace(view, night_points=(new, *view.night_points)), *desk.now.targets[1:]))
        app._nudge.set()
        await settle(pilot)
        assert len(app.screen._points()) == len(view.night_points) + 1
        assert app.screen._chosen() == before


async def test_targets_are_switched_by_key_and_by_enter() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        seen = []
        for _ in range(3):
            await pilot.press("right_square_bracket")
            seen.append(app.target_name)
        assert seen == ["Liskova 2", "Korab b", "Vesna 7"]
        await pilot.press("left_square_bracket")
        assert app.target_name == "Korab b"
        await pilot.press("down", "enter")
        await settle(pilot)
        assert app.target_name == "Liskova 2"
        await pilot.press("5")
        await settle(pilot)
        assert "Cannot tell yet" in screen_text(app)


async def test_safety_line_is_hidden_once_for_the_session() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        assert "local rules and licensed practice prevail" in screen_text(app)
        await pilot.press("escape", "2", "1")
        await settle(pilot)
        assert "Safety" not in screen_text(app)


async def test_a_vanished_target_is_replaced_by_the_first() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        desk.change(targets=invented_snapshot().targets[1:])
        app._nudge.set()
        await settle(pilot)
        assert app.target_name == "Liskova 2"
