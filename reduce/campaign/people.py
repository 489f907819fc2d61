"""Who decides and notes."""

from __future__ import annotations

import getpass

from reduce.plain_text import clean_text

PROGRAM = "fadeline"
"""Who writes events into the log."""


def who() -> str:
    """Name of the person at the keyboard, as the system knows it."""
    try:
        return clean_text(getpass.getuser(), 60)
    except (KeyError, OSError):
        return "unknown"
