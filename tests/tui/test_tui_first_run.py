"""The first run page by page: what is asked, what is refused, what is made; goldens of every page."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import pytest
from on_screen import SIZES, check_golden, screen_text
from textual.pilot import Pilot

from reduce.plain_text import PlainError
from reduce.views import FilterRow, FolderSurvey, ObjectRow
from tui.actions import ACTIONS, FIRST_RUN
from tui.first_run import PAGES, FirstRunApp, likely_frames_folder, likely_stars
from tui.widgets.first_run_pages import FramesPage, StarsPage, TargetPage

SURVEY = FolderSurvey(
    folder="/data/night",
    kinds={"light": 24, "bias": 10, "flat": 8, "unknown": 1},
    cameras=("Kamera 2, 1024 × 1024 pixels, 1.1″ a pixel",),
    filters=(FilterRow("Slot 5", None, 6, False), FilterRow("B", "B", 12, False), FilterRow("V", "V", 14, False)),
    objects=(ObjectRow("Vesna 7", 20, 188.905, 12.031), ObjectRow("Korab b", 4, None, None)),
    nights=("2031-05-05", "2031-05-06"),
    missing=(
        "No band is known for filter 'Slot 5': such frames cannot be measured.",
        "No flats in B: frames count as doubtful until there are some.",
    ),
    unusable=("half.fits: the file is cut short: it holds 4196160 of 8392320 bytes; copy it again.",),
)  # fmt: skip


class FakeFirstRun:
    """A folder in memory; ``refuse`` makes the next call of that name fail with its sentence."""

    def __init__(self) -> None:
        self.folder = Path("/data/campaign")
        self.refuse: dict[str, str] = {}
        self.begun: list[tuple[Path, Path, dict[str, str], dict[str, str]]] = []

    def _maybe_refuse(self, name: str) -> None:
        if name in self.refuse:
            raise PlainError(self.refuse.pop(name))

    async def survey(self, frames: Path, settings: Mapping[str, str]) -> FolderSurvey:
        self._maybe_refuse("survey")
        named = {key.removeprefix("filters."): band for key, band in settings.items()}
        filters = tuple(
            replace(row, band=named.get(row.name, row.band), named=row.name in named) for row in SURVEY.filters
        )
        missing = SURVEY.missing if any(row.band is None for row in filters) else SURVEY.missing[1:]
        return replace(SURVEY, folder=str(frames), filters=filters, missing=missing)

    async def check_settings(self, settings: Mapping[str, str]) -> None:
        self._maybe_refuse("check_settings")

    async def check_target(self, facts: Mapping[str, str]) -> str:
        self._maybe_refuse("check_target")
        return f"{facts['name']} at RA 188.910000°, Dec +12.040000°."

    async def check_stars(self, path: Path, facts: Mapping[str, str]) -> str:
        self._maybe_refuse("check_stars")
        return f"11 stars (B 11, V 11); the nearest lies 0.9 arcmin from {facts['name']}."

    async def begin(self, frames: Path, stars: Path, facts: Mapping[str, str], settings: Mapping[str, str]) -> None:
        self._maybe_refuse("begin")
        self.begun.append((frames, stars, {k: v for k, v in facts.items() if v}, dict(settings)))

    def close(self) -> None:
        pass


async def settle(pilot: Pilot[None]) -> None:
    """Until checks are done and the page is drawn."""
    for _ in range(400):
        await pilot.pause()
        busy = [worker for worker in pilot.app.workers if not worker.is_finished]
        if not busy:
            await pilot.pause()
            return
        await pilot.app.workers.wait_for_complete(busy)
    raise AssertionError("the app never settled")


async def go_to(pilot: Pilot[None], page: str) -> None:
    """Fill what must be filled and go on until this page is there."""
    app = pilot.app
    assert isinstance(app, FirstRunApp)
    await settle(pilot)
    app.query_one(FramesPage).fill("/data/night")
    for _ in PAGES:
        present = PAGES[app.present]
        if page == present.NAME:
            return
        if present is TargetPage:
            await pilot.press(*"Vesna 7", "enter", *"188.91, 12.04")
        if present is StarsPage:
            app.query_one(StarsPage).fill("/data/stars.csv")
        await pilot.press("ctrl+n")
        await settle(pilot)
    raise AssertionError(f"{page} was never reached: {screen_text(app)}")


@pytest.mark.parametrize("size", SIZES, ids=["80x24", "160x48"])
@pytest.mark.parametrize("page", [page.NAME for page in PAGES])
async def test_page_looks_as_agreed(page: str, size: tuple[int, int]) -> None:
    app = FirstRunApp(FakeFirstRun())
    async with app.run_test(size=size) as pilot:
        await go_to(pilot, page)
        text = screen_text(app)
        check_golden(f"first_run_{page.lower()}_{size[0]}x{size[1]}", text)
        assert all(len(line) <= size[0] for line in text.splitlines())
        for action in ACTIONS:
            if FIRST_RUN in action.screens and (action.call != "next_object" or page == "Target"):
                assert f"{action.key_shown} {action.label}" in text.splitlines()[-1]


async def test_the_whole_way_makes_what_was_typed() -> None:
    desk = FakeFirstRun()
    app = FirstRunApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "Recognised")
        await pilot.press("enter", "down", "down", "enter")  # Slot 5 is R
        await settle(pilot)
        assert "Slot 5" not in screen_text(app).split("filter  ")[0], "it is still said to be without a band"
        await pilot.press("enter")  # that is right: go on
        await settle(pilot)
        await pilot.press(*"46.2, 14.5, 410", "enter", *"0.3", "ctrl+n")
        await settle(pilot)
        await pilot.press(*"Vesna 7", "enter", *"12:35:38.4 +12:02:24", "enter", "enter", *"0.0181", "ctrl+n")
        await settle(pilot)
        await pilot.press("ctrl+u", *"/data/stars.csv", "enter")
        await settle(pilot)
        assert "11 stars (B 11, V 11)" in screen_text(app)
        await pilot.press("enter")
        await settle(pilot)
    assert app.made
    (begun,) = desk.begun
    assert begun == (
        Path("/data/night"), Path("/data/stars.csv"),
        {"name": "Vesna 7", "position": "12:35:38.4 +12:02:24", "kind": "type_ia", "z": "0.0181"},
        {"filters.Slot 5": "R", "site.position": "46.2, 14.5, 410", "telescope.aperture_m": "0.3"},
    )  # fmt: skip


@pytest.mark.parametrize(
    ("page", "call"),
    [("Frames", "survey"), ("Telescope", "check_settings"), ("Target", "check_target"), ("Stars", "check_stars"),
     ("Begin", "begin")],
)  # fmt: skip
async def test_what_cannot_be_is_said_and_the_page_stays(page: str, call: str) -> None:
    desk = FakeFirstRun()
    app = FirstRunApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, page)
        desk.refuse[call] = "That cannot be: mend it."
        await pilot.press("ctrl+n")
        await settle(pilot)
        assert "That cannot be: mend it." in screen_text(app)
        assert page == PAGES[app.present].NAME
        assert not app.made


async def test_back_loses_nothing_and_leaving_makes_nothing() -> None:
    desk = FakeFirstRun()
    app = FirstRunApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "Stars")
        await pilot.press("escape", "escape")
        await settle(pilot)
        assert PAGES[app.present].NAME == "Telescope"
        await pilot.press("ctrl+n")
        await settle(pilot)
        assert app.query_one(TargetPage).facts()["name"] == "Vesna 7"
        await pilot.press("escape", "escape", "escape", "escape")
        await settle(pilot)
        assert "This is the first step" in screen_text(app)
        await pilot.press("ctrl+q")
    assert not app.made
    assert not desk.begun


async def test_an_object_of_the_headers_may_be_the_target_with_a_caution() -> None:
    app = FirstRunApp(FakeFirstRun())
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "Target")
        await pilot.press("ctrl+o")
        await settle(pilot)
        facts = app.query_one(TargetPage).facts()
        assert (facts["name"], facts["position"]) == ("Vesna 7", "188.905000, 12.031000")
        assert "where the telescope pointed" in screen_text(app)
        await pilot.press("ctrl+o")
        await settle(pilot)
        facts = app.query_one(TargetPage).facts()
        assert (facts["name"], facts["position"]) == ("Korab b", "")
        assert "no common position" in screen_text(app)


async def test_letters_typed_ahead_reach_the_line_they_were_meant_for() -> None:
    """All keys in one burst, as a slow line delivers them."""
    app = FirstRunApp(FakeFirstRun())
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "Target")
        await pilot.press(*"Old", "ctrl+u", *"Vesna 7", "enter", *"1, 2", "enter", "enter", *"0.01")
        await settle(pilot)
        facts = app.query_one(TargetPage).facts()
        assert [facts[k] for k in ("name", "position", "kind", "z")] == ["Vesna 7", "1, 2", "type_ia", "0.01"]


async def test_hostile_names_are_shown_as_they_are() -> None:
    class Hostile(FakeFirstRun):
        async def survey(self, frames: Path, settings: Mapping[str, str]) -> FolderSurvey:
            named = "[bold]x[/] =1+1"
            return replace(
                SURVEY, filters=(FilterRow(named, None, 1, False),), objects=(ObjectRow("[red]o[/]", 1, 1.0, 2.0),),
                cameras=("[link=x]c[/link]",), missing=("[/nonsense]",),
            )  # fmt: skip

    app = FirstRunApp(Hostile())
    async with app.run_test(size=(80, 24)) as pilot:
        await go_to(pilot, "Recognised")
        text = screen_text(app)
        assert "[bold]x[/] =1+1" in text
        assert "[red]o[/]" in text
        assert "[link=x]c[/link]" in text
        await pilot.press("enter")
        await settle(pilot)
        assert "[bold]x[/]" in screen_text(app)


@pytest.mark.parametrize("size", [(60, 20), (40, 10), (20, 6)], ids=str)
async def test_a_tiny_terminal_breaks_nothing(size: tuple[int, int]) -> None:
    app = FirstRunApp(FakeFirstRun())
    async with app.run_test(size=size) as pilot:
        await go_to(pilot, "Begin")
        await pilot.press("enter")
        await settle(pilot)
    assert app.made


def test_likely_places_are_proposed(tmp_path: Path) -> None:
    assert likely_frames_folder(tmp_path) == f"{tmp_path}/"
    (tmp_path / "frames").mkdir()
    assert likely_frames_folder(tmp_path) == f"{tmp_path}/frames/"
    assert likely_stars(tmp_path, tmp_path / "frames") == ""
    (tmp_path / "one.csv").touch()
    assert likely_stars(tmp_path / "frames", tmp_path / "frames") == f"{tmp_path}/one.csv"
    (tmp_path / "two.csv").touch()
    assert likely_stars(tmp_path, tmp_path / "frames") == ""
