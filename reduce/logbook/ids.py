"""Identifiers that sort by time and never repeat, so that the union of two logbooks is a merge."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable
from datetime import UTC, datetime


def utc_now() -> datetime:
    """The system clock, UTC."""
    return datetime.now(UTC)


def iso(moment: datetime) -> str:
    """``2026-03-01T21:04:05Z``."""
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


class IdMaker:
    """Ids of 32 hexadecimal digits: milliseconds (12), a counter (4), random (16).

    The counter keeps the order of ids made in one millisecond, and of ids made after the clock went back.
    """

    def __init__(self, clock: Callable[[], datetime] = utc_now, random: Callable[[int], bytes] = os.urandom) -> None:
        self._clock, self._random = clock, random
        self._last = (0, 0)
        self._guard = threading.Lock()

    def __call__(self) -> str:
        """The next id."""
        with self._guard:
            ms = int(self._clock().timestamp() * 1000)
            last_ms, count = self._last
            if ms > last_ms:
                self._last = (ms, 0)
            elif count < 0xFFFF:
                self._last = (last_ms, count + 1)
            else:
                self._last = (last_ms + 1, 0)
            ms, count = self._last
        return f"{ms:012x}{count:04x}{self._random(8).hex()}"
