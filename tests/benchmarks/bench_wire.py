"""Bytes that the app writes to a terminal of 80x24 in 256 colours, for what an observer does.

``python tests/benchmarks/bench_wire.py [CAMPAIGN]`` runs the real program under a pseudo-terminal, on an invented
campaign or on a campaign folder, and prints bytes beside their bounds. It exits with 1 where a bound is broken.
"""

from __future__ import annotations

import argparse
import fcntl
import os
import pty
import select
import signal
import struct
import sys
import termios
import time
from collections.abc import Callable, Iterable
from pathlib import Path

COLUMNS, ROWS = 80, 24
QUIET_S, FIRST_S = 1.5, 6.0
"""An answer is over when nothing has come for so long, on a busy machine too; its first byte may take longer. A picture
is fetched 0.15 s after the cursor has rested."""
IDLE_S = 10.0
FAKE_APP = Path(__file__).parents[1] / "terminal" / "fake_app.py"
BOUNDS = {"cursor": 200, "replot": 6000, "preview": 6000, "idle": 0}
"""Of the plan for the app at 80x24 in 256 colours, bytes."""
KEYS = {"up": "\x1b[A", "down": "\x1b[B", "right": "\x1b[C", "left": "\x1b[D", "enter": "\r", "escape": "\x1b"}

Step = tuple[str, str, str]
"""(what it is, key, bound or "")."""
STEPS: tuple[Step, ...] = (
    ("to Frames", "2", ""),
    ("cursor and picture", "up", "preview"),
    ("cursor and picture", "up", "preview"),
    ("full screen", "v", ""),
    ("cursor on the picture", "right", "cursor"),
    ("cursor on the picture", "up", "cursor"),
    ("zoom in", "+", "preview"),
    ("zoom in", "+", "preview"),
    ("read the star", "enter", "replot"),
    ("next star", ".", "replot"),
    ("blink", "b", "preview"),
    ("blink back", "b", "preview"),
    ("whole frame", "0", "preview"),
    ("frame before", "\x1b[5~", "preview"),
    ("in dots", "m", "preview"),
    ("back", "escape", ""),
    ("to Field", "3", ""),
    ("star cursor", "down", "cursor"),
    ("residuals against", "c", "replot"),
    ("next band", "b", "replot"),
    ("to Light curve", "4", ""),
    ("point cursor", "left", ""),
    ("point cursor", "left", "cursor"),
    ("point cursor", "left", "cursor"),
    ("hide a band", "V", "replot"),
    ("half the days", "+", "replot"),
    ("all days", "0", "replot"),
    ("to Distance", "5", ""),
)


class Terminal:
    """A program under a pseudo-terminal; ``close`` ends it."""

    def __init__(self, argv: list[str]) -> None:
        environment = {k: v for k, v in os.environ.items() if k not in ("COLUMNS", "LINES", "NO_COLOR", "COLORTERM")}
        environment |= {"TERM": "xterm-256color", "LANG": "C.UTF-8", "TZ": "UTC"}
        self.pid, self.terminal = pty.fork()
        if self.pid == 0:
            os.execvpe(argv[0], argv, environment)
        fcntl.ioctl(self.terminal, termios.TIOCSWINSZ, struct.pack("HHHH", ROWS, COLUMNS, 0, 0))

    def read(self, quiet_s: float, first_s: float) -> bytes:
        """What comes until it is quiet; the first byte may take longer."""
        found = b""
        while select.select([self.terminal], [], [], quiet_s if found else first_s)[0]:
            try:
                found += os.read(self.terminal, 65536)
            except OSError:
                break
        return found

    def press(self, key: str) -> int:
        """Bytes that answer a key."""
        os.write(self.terminal, KEYS.get(key, key).encode())
        return len(self.read(QUIET_S, FIRST_S))

    def wait(self, seen: Callable[[bytes], bool], timeout_s: float) -> int:
        """Bytes until the app shows something."""
        found, end = b"", time.monotonic() + timeout_s
        while not seen(found):
            if time.monotonic() > end:
                raise SystemExit("The app did not show its campaign in time.")
            found += self.read(0.2, 0.2)
        return len(found + self.read(QUIET_S, QUIET_S))

    def close(self) -> None:
        """Quit, and make sure of it."""
        os.write(self.terminal, b"q")
        self.read(QUIET_S, QUIET_S)
        os.close(self.terminal)
        try:
            os.kill(self.pid, signal.SIGHUP)
        except ProcessLookupError:
            return
        os.waitpid(self.pid, 0)


def measured(terminal: Terminal, steps: Iterable[Step]) -> list[tuple[str, str, int, str]]:
    """(what, key, bytes, bound) of each step, and what comes unasked while nothing is done."""
    rows = [(what, repr(key), terminal.press(key), bound) for what, key, bound in steps]
    start, idle = time.monotonic(), 0
    while time.monotonic() < start + IDLE_S:
        idle += len(terminal.read(0.5, 0.5))
    return [*rows, (f"nothing for {IDLE_S:.0f} s", "", idle, "idle")]


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("campaign", nargs="?", type=Path)
    asked = parser.parse_args()
    program = [sys.executable, str(FAKE_APP)]
    if asked.campaign is not None:
        program = [str(Path(sys.executable).with_name("fadeline")), "open", str(asked.campaign)]
    terminal = Terminal(program)
    try:
        first = terminal.wait(lambda shown: b"Distance" in shown and b"of " in shown, 120.0)
        print(f"{'first screens':24}{'':12}{first:8}")
        rows = measured(terminal, STEPS)
    finally:
        terminal.close()
    broken = 0
    for what, key, n, bound in rows:
        over = bool(bound) and n > BOUNDS[bound]
        broken += over
        note = f"{bound} <= {BOUNDS[bound]}{'   OVER' if over else ''}" if bound else ""
        print(f"{what:24}{key:12}{n:8}  {note}")
    return 1 if broken else 0


if __name__ == "__main__":
    sys.exit(main())
