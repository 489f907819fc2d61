"""The app around its screens: imports, following the logbook, troubles as sentences."""

import subprocess
import sys

import pytest
from fake_desk import FakeDesk
from on_screen import screen_text, settle

from reduce.plain_text import PlainError
from tui.app import FadelineApp
from tui.messages import trouble_sentence

HEAVY = ("astropy", "scipy", "photutils", "pandas", "numpy")


def test_importing_the_app_imports_no_science() -> None:
    code = f"import sys, tui.app; print([m for m in {HEAVY} if m in sys.modules])"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"


def test_all_screens_import_no_astropy_scipy_photutils_or_pandas() -> None:
    screens = "tonight frames field light_curve distance log help palette choice picture setup plan"
    modules = ", ".join(f"tui.screens.{name}" for name in screens.split())
    code = f"import sys, {modules}; print([m for m in {HEAVY[:4]} if m in sys.modules])"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"


async def test_unchanged_logbook_makes_no_second_snapshot() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        for _ in range(5):
            app._nudge.set()
            await settle(pilot)
        assert desk.snapshots_made == 1


@pytest.mark.parametrize("where", ["stamp", "snapshot"])
async def test_trouble_of_the_follower_is_a_sentence_and_passes(where: str) -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        desk.change()
        desk.refuse[where] = PlainError("logbook.sqlite is locked by a copy program: let it finish.")
        app._nudge.set()
        for _ in range(100):
            await pilot.pause()
            if "is locked" in screen_text(app):
                break
        assert "logbook.sqlite is locked by a copy program: let it finish." in screen_text(app)
        app._nudge.set()
        await settle(pilot)
        assert "is locked" not in screen_text(app)


def test_an_unforeseen_error_is_one_sentence_too() -> None:
    words = trouble_sentence(ValueError("bad\n\x1b[31mthing"))
    assert words == "Something went wrong (ValueError: bad ·[31mthing); the logbook is safe."


async def test_unreadable_frame_is_a_sentence_in_the_pictures_place() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "up")
        await settle(pilot)
        picture = app.screen.query_one("Preview")
        assert "4196160" in "".join("".join(s.text for s in picture.render_line(y)) for y in range(6))


async def test_q_leaves() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("q")
    assert not app.is_running
    assert app.return_code == 0
