"""Functions that workers run in the tests of the runner; each behaves badly in its own way."""

from __future__ import annotations

import os
import signal
import sys
import time
from pathlib import Path

from reduce.plain_text import PlainError


def square(x):
    return x * x


def give_what_cannot_be_sent(x):
    return (lambda: x) if x == 1 else x


def speak(x):
    print("library chatter", flush=True)
    print("library complaint", file=sys.stderr, flush=True)
    os.write(2, b"from below")
    return x


def fail(x):
    if x == 2:
        raise PlainError("this one cannot be done.")
    if x == 3:
        raise ValueError("bad\x1b[31m thing")
    return x


def hang_on_negative(x):
    while x < 0:
        time.sleep(0.05)
    return x


def die_on_negative(x):
    if x < 0:
        os.kill(os.getpid(), signal.SIGKILL)
    return x


def die_the_first_time(path):
    mark = Path(path)
    if not mark.exists():
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return "alive"


def process_and_threads(_):
    return os.getpid(), os.environ.get("OPENBLAS_NUM_THREADS"), "colorsys" in sys.modules


def write_pid_and_hang(path):
    part = Path(path).with_suffix(".part")
    part.write_text(str(os.getpid()))
    part.replace(path)
    time.sleep(600)
