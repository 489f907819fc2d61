"""The demo's own logbook in a real terminal of 80×24: look, exclude, undo, note, leave, and find it all again."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from tmux_driver import Tmux

from reduce.campaign.door import Campaign
from reduce.logbook.store import Logbook

pytestmark = pytest.mark.terminal
EXCLUDED = re.compile(r"Excluded B of ([\d-]+)")
MODULUS = re.compile(r"μ (\d+\.\d+ ± \d+\.\d+) mag")


@pytest.fixture
def open_app() -> Iterator:
    started: list[Tmux] = []

    def start(folder: Path, cols: int = 80, rows: int = 24) -> Tmux:
        app = Tmux([sys.executable, "-m", "tui.cli", "open", str(folder)], cols, rows)
        started.append(app)
        return app

    yield start
    for app in started:
        app.close()


def modulus(screen: str) -> str:
    found = MODULUS.search(screen)
    assert found, screen
    return found[1]


def wait_for_modulus(app: Tmux, other_than: str = "") -> str:
    return modulus(app.wait_until(lambda screen: (found := MODULUS.search(screen)) and found[1] != other_than))


def exclude_last_points(app: Tmux, n: int) -> None:
    """Exclude the last nights in B; a single point among 48 moves the modulus by less than what is shown."""
    app.keys("4")
    app.wait("O−C")
    app.keys("b")
    app.wait("mag, band B")
    seen: set[str] = set()
    for k in range(n):
        app.keys("Left")
        app.keys("x")
        app.wait_until(lambda screen, k=k: (m := EXCLUDED.search(screen)) and m[1] not in seen, what=f"exclusion {k}")
        seen.add(EXCLUDED.search(app.screen())[1])


def leave(app: Tmux) -> None:
    app.keys("q")
    app.wait("EXIT=0")


def test_the_evening_of_an_observer(open_app, demo, tmp_path):
    folder = demo.copy(tmp_path / "campaign")
    app = open_app(folder)
    first = wait_for_modulus(app)
    for key, text in (
        ("1", "latest frame"),
        ("2", "f Filter"),
        ("3", "resid"),
        ("4", "O−C"),
        ("5", "Stands on: H0 = 73.04"),
        ("6", "when (UTC)"),
    ):
        app.keys(key)
        screen = app.wait(text)
        assert all(len(line) <= 80 for line in screen.splitlines())
    exclude_last_points(app, 5)
    changed = wait_for_modulus(app, other_than=first)
    for _ in range(5):
        app.keys("u")
    assert wait_for_modulus(app, other_than=changed) == first
    app.keys("n")
    app.wait("enter stores it")
    app.keys("Seeing", "Space", "went", "Space", "bad", "Enter")
    app.wait("Seeing went bad")
    leave(app)

    again = open_app(folder, 160, 48)
    assert wait_for_modulus(again) == first
    again.keys("6")
    screen = again.wait("Seeing went bad")
    assert "excluded" in screen
    assert "taken back" in screen
    leave(again)
    with Logbook.open(folder) as book:
        assert [row.body for row in book.log(kind="note")] == ["Seeing went bad"]
        assert not book.choices().excluded_points


def test_two_sessions_see_the_same(open_app, demo, tmp_path):
    folder = demo.copy(tmp_path / "campaign")
    one, two = open_app(folder), open_app(folder)
    first = wait_for_modulus(one)
    assert wait_for_modulus(two) == first
    exclude_last_points(one, 5)
    book = Logbook.open(folder)
    assert len(book.choices().excluded_points) == 5
    target = book.targets()[0].name
    want = f"{Campaign.open(folder).estimate(target).mu:.3f}"
    for app in (one, two):
        app.wait_until(lambda screen: want in screen, what=want)
    book.close()
    leave(one)
    leave(two)


def test_the_demo_command_shows_nights_arriving(open_app, tmp_path):
    app = Tmux([sys.executable, "-m", "tui.cli", "demo", "--folder", str(tmp_path / "demo"), "--seed", "3"])
    try:
        app.wait("latest frame", 120)
        app.wait("kept", 60)
        wait_for_modulus(app)
        leave(app)
    finally:
        app.close()


def test_a_folder_without_a_campaign_starts_the_first_run(open_app, tmp_path):
    app = open_app(tmp_path)
    app.wait("A new campaign in")
    app.keys("C-q")
    app.wait("EXIT=0")
