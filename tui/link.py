"""How far away the terminal is: the time a question takes to come back, asked once before the app starts."""

from __future__ import annotations

import os
import select
import termios
import time
import tty
from collections.abc import Mapping

SLOW_S = 0.15
"""A round trip from which a key no longer feels immediate (common practice)."""
PATIENCE_S = 1.0
_QUESTION = b"\x1b[5n"
_ANSWER = b"\x1b[0n"
"""Device status report of ECMA-48, which terminals answer with "ready"."""


def comes_over_ssh(environ: Mapping[str, str]) -> bool:
    """Whether the terminal stands at another machine, as sshd says."""
    return bool(environ.get("SSH_CONNECTION") or environ.get("SSH_TTY"))


def round_trip_s(input_fd: int, output_fd: int, patience_s: float = PATIENCE_S) -> float | None:
    """Seconds until the terminal has answered; None when it does not. Keys typed meanwhile are lost."""
    try:
        before = termios.tcgetattr(input_fd)
    except termios.error:
        return None
    try:
        tty.setraw(input_fd)
        began = time.monotonic()
        os.write(output_fd, _QUESTION)
        said = b""
        while (left := began + patience_s - time.monotonic()) > 0:
            if select.select([input_fd], [], [], left)[0]:
                said += os.read(input_fd, 64)
                if _ANSWER in said:
                    return time.monotonic() - began
        return None
    finally:
        termios.tcsetattr(input_fd, termios.TCSAFLUSH, before)


def is_slow(choice: str, environ: Mapping[str, str], measured_s: float | None) -> bool:
    """Whether to be sparing: as chosen, and on "auto" over SSH when the terminal is far away or does not answer."""
    if choice != "auto":
        return choice == "yes"
    return comes_over_ssh(environ) and (measured_s is None or measured_s > SLOW_S)
