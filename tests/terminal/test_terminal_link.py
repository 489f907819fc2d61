"""The line between app and terminal: suspended, hung up, far away, small."""

import os
import pty
import select
import signal
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from tmux_driver import Tmux

from tui.link import round_trip_s

APP = [sys.executable, str(Path(__file__).parent / "fake_app.py")]
pytestmark = pytest.mark.terminal
ENOUGH_S = 60.0


@pytest.fixture
def programs() -> Iterator[list[Tmux]]:
    started: list[Tmux] = []
    yield started
    for program in started:
        program.close()


def test_suspended_and_brought_back_the_screen_is_whole(programs: list[Tmux]) -> None:
    shell = Tmux(["bash", "--norc", "--noprofile", "-i"], env={"PS1": "ready> "})
    programs.append(shell)
    shell.wait("ready>")
    shell.keys(" ".join(APP), "Enter")
    shell.wait("wants")
    shell.keys("2")
    shell.wait("f Filter")
    before = shell.stable()
    shell.keys("C-z")
    shell.wait("Stopped")
    shell.keys("fg", "Enter")
    shell.wait("f Filter")
    shell.wait_until(lambda screen: screen == before, ENOUGH_S, "the screen as before")
    shell.keys("Up")
    shell.wait_until(lambda screen: screen != before, ENOUGH_S, "an answer to a key")
    shell.keys("q")
    shell.wait("ready>")


@pytest.mark.parametrize("size", [(60, 20), (80, 24), (160, 48)], ids=str)
def test_every_screen_stays_within_its_terminal(programs: list[Tmux], size: tuple[int, int]) -> None:
    app = Tmux(APP, *size)
    programs.append(app)
    app.wait("latest frame")
    for key, text in (("2", "Keep"), ("3", "resid"), ("4", "all bands"), ("5", "Stands on"), ("6", "when (UTC)")):
        app.keys(key)
        screen = app.wait(text)
        assert all(len(row) <= size[0] for row in screen.splitlines())
        assert "Traceback" not in screen
    app.keys("?")
    app.wait("esc closes")
    app.keys("Escape")
    app.wait_until(lambda screen: "esc closes" not in screen, what="the help closed")
    app.keys("G")
    app.wait("page 1 of 2")
    app.keys("Right")
    app.wait("page 2 of 2")
    app.keys("Escape")
    app.wait_until(lambda screen: "page 2 of 2" not in screen, what="the guide closed")
    app.keys("q")
    app.wait("EXIT=0")


def test_a_dropped_line_ends_the_app_and_loses_nothing(demo, tmp_path: Path) -> None:
    from reduce.logbook.store import Logbook

    folder = demo.copy(tmp_path / "campaign")
    pid, fd = pty.fork()
    if pid == 0:
        environ = {k: v for k, v in os.environ.items() if k in ("PATH", "HOME", "VIRTUAL_ENV", "PYTHONPATH")}
        command = [sys.executable, "-m", "tui.cli", "open", str(folder)]
        os.execvpe(command[0], command, environ | {"TERM": "xterm-256color", "LANG": "C.UTF-8"})
    _read_until(fd, b"latest frame")
    os.write(fd, b"n")
    _read_until(fd, b"enter stores it")
    os.write(fd, b"Dew on glass\r")
    _read_until(fd, b"Noted")
    os.close(fd)  # the kernel sends SIGHUP to the app
    _, status = _wait_for_end(pid)
    assert os.WIFEXITED(status), f"ended by signal {os.WTERMSIG(status)}"
    with Logbook.open(folder) as book:
        assert book.check() == ""
        assert book.log()[-1].body == "Dew on glass"


def _read_until(fd: int, text: bytes) -> None:
    data, end = b"", time.monotonic() + ENOUGH_S
    while time.monotonic() < end:
        if select.select([fd], [], [], 0.1)[0]:
            data += os.read(fd, 65536)
            if text in data:
                return
    raise AssertionError(f"{text!r} never came")


def _wait_for_end(pid: int) -> tuple[int, int]:
    end = time.monotonic() + ENOUGH_S
    while time.monotonic() < end:
        done = os.waitpid(pid, os.WNOHANG)
        if done[0]:
            return done
        time.sleep(0.05)  # how often the end is looked for
    os.kill(pid, signal.SIGKILL)
    os.waitpid(pid, 0)
    raise AssertionError("the app outlived its terminal")


class _FarTerminal(threading.Thread):
    """Answers a device status report (ECMA-48) after a while, or never."""

    def __init__(self, fd: int, delay_s: float | None) -> None:
        super().__init__(daemon=True)
        self.fd, self.delay_s = fd, delay_s

    def run(self) -> None:
        said = b""
        while b"\x1b[5n" not in said:
            said += os.read(self.fd, 64)
        if self.delay_s is not None:
            threading.Event().wait(self.delay_s)  # the distance itself
            os.write(self.fd, b"x\x1b[0n")


@pytest.mark.parametrize("delay_s", [0.0, 0.3, None])
def test_the_round_trip_is_measured_and_the_terminal_left_as_it_was(delay_s: float | None) -> None:
    import termios

    near, far = pty.openpty()
    try:
        before = termios.tcgetattr(far)
        _FarTerminal(near, delay_s).start()
        measured = round_trip_s(far, far, patience_s=2.0 if delay_s is not None else 0.2)
        assert termios.tcgetattr(far) == before
    finally:
        os.close(near)
        os.close(far)
    if delay_s is None:
        assert measured is None
    else:
        assert measured is not None
        assert measured >= delay_s


def test_what_is_no_terminal_is_not_asked(tmp_path: Path) -> None:
    with (tmp_path / "file").open("w+b") as file:
        assert round_trip_s(file.fileno(), file.fileno()) is None
        assert file.tell() == 0
