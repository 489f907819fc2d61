"""The app in a real terminal: walk, resize, leave; the difference writer against Textual's own."""

import fcntl
import os
import pty
import select
import struct
import sys
import termios
import time
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


def test_walk_resize_and_leave(programs: list[Tmux]) -> None:
    app = Tmux(APP)
    programs.append(app)
    app.wait("wants")
    app.keys("4")
    app.wait("all bands")
    app.keys("Left", "x")
    app.wait("Excluded I of 2031-05-27")
    before = app.stable()
    app.keys("6")
    app.wait("when (UTC)")
    app.keys("4")
    app.wait("all bands")
    assert app.stable() == before
    app.resize(60, 20)
    small = app.wait("all bands")
    assert all(len(line) <= 60 for line in small.splitlines())
    app.resize(80, 24)
    app.wait(before.splitlines()[-1])
    assert app.stable() == before
    app.keys("q")
    screen = app.wait("EXIT=0")
    assert "DELTA=" not in screen


def test_difference_and_textual_leave_the_same_screen(programs: list[Tmux]) -> None:
    pair = [Tmux(APP), Tmux(APP, env={"FADELINE_DELTA": "0"})]
    programs += pair
    for keys, text in (
        ((), "wants"),
        (("2",), "f Filter"),
        (("Up", "Up", "d"), "Dropped"),
        (("3",), "resid"),
        (("4", "Left", "Left", "x"), "Excluded"),
        (("5",), "Stands on"),
        (("?",), "esc closes"),
        (("Escape",), "Stands on"),
        (("6", "n"), "Search"),
    ):
        for app in pair:
            if keys:
                app.keys(*keys)
            app.wait(text)
        assert _alike(pair), keys


def _alike(pair: list[Tmux], limit_s: float = 30.0) -> bool:
    """Whether both come to show the same; a picture may reach one of them later."""
    end = time.monotonic() + limit_s
    while time.monotonic() < end:
        if pair[0].stable(styles=True) == pair[1].stable(styles=True):
            return True
    return False


@pytest.mark.parametrize(
    "env", [{"TERM": "xterm"}, {"NO_COLOR": "1"}, {"TERM": "dumb"}, {"LANG": "C", "LC_ALL": "C"}], ids=str
)
def test_poor_terminals_show_all_screens(programs: list[Tmux], env: dict[str, str]) -> None:
    app = Tmux(APP, env=env)
    programs.append(app)
    app.wait("wants")
    for key, text in (
        ("2", "f Filter"),
        ("3", "resid"),
        ("4", "all bands"),
        ("5", "Stands on"),
        ("6", "when (UTC)"),
    ):
        app.keys(key)
        app.wait(text)
    app.keys("q")
    app.wait("EXIT=0")


def _read(fd: int, quiet_s: float, limit_s: float) -> bytes:
    """What comes until nothing has come for a while, or the program has left."""
    data, end = b"", time.monotonic() + limit_s
    while time.monotonic() < end and select.select([fd], [], [], quiet_s)[0]:
        try:
            data += os.read(fd, 65536)
        except OSError:  # the program has left and its terminal with it
            break
    return data


def test_an_idle_app_sends_nothing() -> None:
    """Three polls of the logbook and a focused input line: not a byte on the wire."""
    pid, fd = pty.fork()
    if pid == 0:
        environ = {k: v for k, v in os.environ.items() if k in ("PATH", "HOME", "VIRTUAL_ENV")}
        os.execvpe(APP[0], APP, environ | {"TERM": "xterm-256color", "LANG": "C.UTF-8"})
    try:
        fcntl.ioctl(fd, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
        assert select.select([fd], [], [], 30)[0]
        first = _read(fd, 2.0, 60)
        assert b"Tonight" in first
        os.write(fd, b"n")
        assert b"write, enter stores it" in _read(fd, 1.0, 30)
        assert select.select([fd], [], [], 3.2)[0] == []
        os.write(fd, b"\x1b")
        _read(fd, 1.0, 30)
        os.write(fd, b"q")
        _read(fd, 1.0, 30)
    finally:
        os.close(fd)
        _, status = os.waitpid(pid, 0)
    assert os.waitstatus_to_exitcode(status) == 0
