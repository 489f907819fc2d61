"""Setup: rows for everything, changed where they stand, refused in one sentence, put back with one key."""

from dataclasses import replace
from pathlib import Path

import pytest
from fake_desk import FakeDesk, invented_snapshot
from on_screen import screen_text, settle
from textual.pilot import Pilot

from reduce.campaign.settings_file import settings_keys, settings_texts
from reduce.plain_text import PlainError
from reduce.settings import parse_settings
from tui.actions import SCREENS
from tui.app import FadelineApp
from tui.setup_rows import SETTINGS, setup_rows
from tui.widgets.path_input import PathInput, completed, names_of, offers
from tui.widgets.row_table import RowTable

KEY = str(list(SCREENS).index("setup") + 1)


async def go_to(pilot: Pilot[None], subject: str) -> None:
    """Setup, with the cursor on a row."""
    await settle(pilot)
    await pilot.press(KEY)
    await settle(pilot)
    table = pilot.app.screen.query_one(RowTable)
    table.move_cursor(row=table.get_row_index(subject))
    await settle(pilot)


# ---- rows ------------------------------------------------------------------------------------------------


def test_every_setting_there_is_has_a_row() -> None:
    """Keys as `Settings` declares them; the three of the site's place stand in one row."""
    setup = replace(invented_snapshot().setup, settings=dict.fromkeys(settings_keys(), ""))
    shown = {row.subject for row in setup_rows(replace(invented_snapshot(), setup=setup))}
    place = {"site.latitude_deg", "site.longitude_deg", "site.height_m"}
    assert {f"setting:{key}" for key in {*settings_keys(), "site.position"} - place} <= shown
    assert {key for _, key, _, _ in SETTINGS} - {"site.position"} <= set(settings_keys())
    assert settings_keys()[:2] == ["site.name", "site.latitude_deg"]


def test_rows_show_values_as_they_would_be_typed() -> None:
    snapshot = invented_snapshot()
    settings = parse_settings("[camera]\nfringe_bands = ['I']\n[photometry]\naperture_fwhm = { V = 1.5 }\n")
    snapshot = replace(snapshot, setup=replace(snapshot.setup, settings=settings_texts(settings)))
    rows = {row.subject: row.value for row in setup_rows(snapshot)}
    assert rows["setting:camera.fringe_bands"] == "I"
    assert rows["setting:photometry.aperture_fwhm.V"] == "1.5"
    assert rows["setting:photometry.aperture_fwhm.B"] == ""
    assert rows["target:Vesna 7:position"] == "188.91, 12.04"
    assert rows["target:Vesna 7:ebv_mw"] == "0.021, SF11"
    assert rows["setting:filters.Slot 5"] == ""
    assert len(rows) == len(setup_rows(snapshot)), "two rows of one subject"


# ---- changing --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("subject", "text"),
    [
        ("setting:camera.gain_e_per_adu", "1.4"),
        ("target:Vesna 7:z", "0.02"),
        ("target:Korab b:position", "12:34:56 +11:00:00"),
        ("sequence", "/stars.csv"),
        ("frames folder", "/elsewhere"),
    ],
)
async def test_a_row_is_changed_where_it_stands(subject: str, text: str) -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, subject)
        await pilot.press("enter", "ctrl+u", *text, "enter")
        await settle(pilot)
        assert desk.changes == [(subject, text)]
        assert isinstance(app.focused, RowTable)
        assert app.screen.query_one(RowTable).chosen() == subject
        assert text in screen_text(app)


async def test_what_is_refused_stays_in_the_line_and_escape_changes_nothing() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "setting:telescope.aperture_m")
        desk.refuse["change_setup"] = PlainError("telescope.aperture_m: '0,3' is not a number.")
        await pilot.press("enter", "ctrl+u", *"0,3", "enter")
        await settle(pilot)
        assert "is not a number" in screen_text(app)
        line = app.screen.query_one(PathInput)
        assert app.focused is line
        assert line.value == "0,3"
        await pilot.press("escape")
        await settle(pilot)
        assert isinstance(app.focused, RowTable)
        assert not desk.changes


async def test_a_filter_is_given_a_band_and_taken_back() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "setting:filters.Slot 5")
        assert "no band" in screen_text(app)
        await pilot.press("enter", "down", "enter")
        await settle(pilot)
        assert desk.changes == [("setting:filters.Slot 5", "V")]
        assert "no band" not in screen_text(app)
        await pilot.press("r")
        await settle(pilot)
        assert desk.changes[-1] == ("setting:filters.Slot 5", "")
        assert "no band" in screen_text(app)
        await pilot.press("r")
        await settle(pilot)
        assert len(desk.changes) == 2
        assert "Nothing was changed here" in screen_text(app)


async def test_sections_are_reached_with_one_key() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "frames folder")
        table, seen = app.screen.query_one(RowTable), []
        rows = {row.subject: row.section for row in setup_rows(app.snapshot)}
        for _ in range(len(set(rows.values()))):
            seen.append(rows[table.chosen()])
            await pilot.press("f")
        assert seen == list(dict.fromkeys(rows.values()))
        assert table.chosen() == "frames folder"


async def test_new_pictures_leave_cursor_and_line_alone() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "setting:camera.name")
        await pilot.press("enter", *"x")
        desk.change(notes=("Something came.",))
        app.look_again()
        await settle(pilot)
        assert app.screen.query_one(PathInput).value == "kamerax"
        await pilot.press("enter")
        await settle(pilot)
        assert desk.changes == [("setting:camera.name", "kamerax")]


async def test_one_more_target_is_asked_for_and_a_refusal_keeps_the_form() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "frames folder")
        await pilot.press("a")
        await settle(pilot)
        desk.refuse["add_target"] = PlainError("Target N has no position.")
        await pilot.press(*"N", "ctrl+n")
        await settle(pilot)
        assert "has no position" in screen_text(app)
        await pilot.press("enter", *"12, 13", "enter", "enter", *"0.02", "ctrl+n")
        await settle(pilot)
        (facts,) = desk.added
        assert (facts["name"], facts["position"], facts["kind"], facts["z"]) == ("N", "12, 13", "type_ia", "0.02")
        assert "is followed from now on" in screen_text(app)
        assert app.current_mode == "setup"


async def test_trouble_leads_to_setup_from_tonight() -> None:
    snapshot = invented_snapshot()
    gone = "The frames folder /frames is not there: mount its disk, or say in Setup where it is now."
    view = replace(snapshot.targets[0], next_sentence=gone, next_screen="Setup")
    app = FadelineApp(FakeDesk(replace(snapshot, targets=(view,), notes=(gone,))))
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        assert f"({KEY} Setup)" in screen_text(app)


# ---- paths -----------------------------------------------------------------------------------------------


@pytest.fixture
def places(tmp_path: Path) -> Path:
    for name in ("night one", "night two", ".hidden", "old"):
        (tmp_path / name).mkdir()
    for name in ("stars.csv", "STARS2.CSV", "frame.fits"):
        (tmp_path / name).touch()
    return tmp_path


@pytest.mark.parametrize(
    ("start", "wanted", "names"),
    [
        ("", "folder", ["night one/", "night two/", "old/"]),
        ("", "csv", ["STARS2.CSV", "night one/", "night two/", "old/", "stars.csv"]),
        ("n", "folder", ["night one/", "night two/"]),
        (".h", "folder", [".hidden/"]),
        ("nothing", "csv", []),
        ("nowhere/x", "csv", []),
    ],
)
def test_paths_that_go_on_from_what_was_typed(places: Path, start: str, wanted: str, names: list[str]) -> None:
    assert offers(f"{places}/{start}", wanted) == [f"{places}/{name}" for name in names]


def test_completing_goes_as_far_as_it_is_clear(places: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    typed = f"{places}/n"
    assert completed(typed, offers(typed, "folder")) == f"{places}/night "
    assert completed("x", []) == "x"
    monkeypatch.chdir(places)
    assert offers("ni", "folder") == ["night one/", "night two/"]
    monkeypatch.setenv("HOME", str(places))
    assert offers("~/o", "folder") == ["~/old/"]


def test_offers_are_harmless_and_not_too_many() -> None:
    shown = names_of([f"/a/\x1b[2Jx{k}/" for k in range(30)])
    assert "\x1b" not in shown
    assert shown.endswith("and 18 more")


async def test_tab_completes_a_path_and_lists_what_is_left(places: Path) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "frames folder")
        await pilot.press("enter", "ctrl+u", *f"{places}/n", "tab")
        await settle(pilot)
        assert app.screen.query_one(PathInput).value == f"{places}/night "
        assert "night one/  night two/" in screen_text(app)
        await pilot.press("o", "tab")
        await settle(pilot)
        assert app.screen.query_one(PathInput).value == f"{places}/night one/"
