"""A night in a real terminal: a frame lands, its line appears, a decision is taken back, the app is killed."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from small_campaign import CALIBRATION, LIGHTS, lay, make_campaign, reduce_here
from tmux_driver import Tmux

from reduce.logbook.store import Logbook

pytestmark = pytest.mark.terminal
LANDING_S = 120.0
"""A wait that ends by itself on any machine; how long it takes is measured in benchmarks/bench_arrival.py."""


@pytest.fixture
def open_app() -> Iterator:
    started: list[Tmux] = []

    def start(folder: Path, cols: int, rows: int) -> Tmux:
        app = Tmux([sys.executable, "-m", "tui.cli", "open", str(folder)], cols, rows)
        started.append(app)
        return app

    yield start
    for app in started:
        app.close()


def pid_of(folder: Path) -> int:
    """The app's process, by its command line."""
    said = subprocess.run(["ps", "-wweo", "pid,args"], capture_output=True, text=True, check=True).stdout
    rows = [line.split(None, 1) for line in said.splitlines()]
    mine = [int(pid) for pid, args in rows if args.startswith(sys.executable) and args.endswith(f"open {folder}")]
    return mine[0]


@pytest.mark.parametrize("size", [(80, 24), (160, 48)], ids=str)
def test_a_frame_lands_and_the_line_after_the_slew_is_there(demo, tmp_path, open_app, size) -> None:
    folder = make_campaign(demo, tmp_path, [*CALIBRATION, *LIGHTS[:2]])
    reduce_here(folder)
    app = open_app(folder, *size)
    newest = Path(LIGHTS[3]).name
    app.wait("S/N B")
    assert newest not in app.wait("latest frame")
    app.keys("2")
    app.wait("f Filter")
    app.keys("Up", "Up")
    chosen = Path(LIGHTS[0]).name
    app.wait(f"{chosen}  ")  # its details, below the table
    lay(demo, tmp_path / "frames", LIGHTS[2:4], age_s=0.0)
    app.wait_until(lambda screen: newest[-12:] in screen, LANDING_S, newest)
    assert f"{chosen}  " in app.stable()  # nothing stole the cursor
    app.keys("1")
    app.wait_until(lambda screen: f"{newest}  offset" in screen, LANDING_S, "the line after the slew")
    app.keys("2")
    app.wait(f"{chosen}  ")
    app.keys("d")
    app.wait("Dropped")
    app.keys("u")
    app.wait("Taken back")
    app.keys("d")
    app.wait("Dropped")
    os.kill(pid_of(folder), signal.SIGKILL)
    app.wait("EXIT=137")
    with Logbook.open(folder) as book:
        assert book.check() == ""
        assert list(book.choices().frame_states.values()) == ["dropped"]
    reopened = open_app(folder, *size)
    reopened.wait("latest frame")
    reopened.keys("u")
    reopened.wait("Taken back")
    reopened.keys("q")
    reopened.wait("EXIT=0")


def test_two_sessions_and_a_resize(demo, tmp_path, open_app) -> None:
    folder = make_campaign(demo, tmp_path, [*CALIBRATION, *LIGHTS[:2]])
    reduce_here(folder)
    one, two = open_app(folder, 80, 24), open_app(folder, 160, 48)
    for app in (one, two):
        app.wait("latest frame")
    one.keys("n")
    one.wait("enter stores it")
    one.keys("Dew", "Space", "on", "Space", "glass", "Enter")
    one.wait("Dew on glass")
    two.keys("6")
    two.wait("Dew on glass")
    two.resize(60, 20)
    two.wait_until(lambda screen: max(map(len, screen.splitlines())) <= 60 and "Dew" in screen, 60.0, "60 columns")
    for app in (one, two):
        app.keys("q")
        app.wait("EXIT=0")
