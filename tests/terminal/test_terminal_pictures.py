"""Pictures in a real terminal: look at a frame, read a star, go back; with and without colour."""

import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from tmux_driver import Tmux

APP = [sys.executable, str(Path(__file__).parent / "fake_app.py")]
pytestmark = pytest.mark.terminal


@pytest.fixture
def programs() -> Iterator[list[Tmux]]:
    started: list[Tmux] = []
    yield started
    for program in started:
        program.close()


@pytest.mark.parametrize("size", [(80, 24), (160, 48)], ids=["80x24", "160x48"])
@pytest.mark.parametrize(
    ("term", "drawn"), [("tmux-256color", "▀"), ("screen", "⠕"), ("dumb", "#")], ids=["256", "16", "none"]
)
def test_look_at_a_frame_and_read_a_star(programs: list[Tmux], size: tuple[int, int], term: str, drawn: str) -> None:
    app = Tmux(APP, *size, env={"TERM": term})
    programs.append(app)
    app.wait("wants")
    app.keys("2")
    app.wait("cloud.fits")
    app.keys("Up", "Up", "Up", "Up")
    app.wait("n11_R_1.fits  2031-05-27")
    app.keys("v")
    app.wait("enter reads the star")
    app.keys("t")
    app.wait("×4")
    assert drawn in app.wait(drawn)
    app.keys("Enter")
    app.wait("Vesna 7  15.200")
    app.keys("+")
    app.wait("×8")
    app.keys("Escape")
    app.wait("f Filter")
    app.keys("q")
    screen = app.wait("EXIT=0")
    assert "DELTA=" not in screen
