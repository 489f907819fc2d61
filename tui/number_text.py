"""Numbers as the screens write them; an unknown number is a dash, never a zero."""

from __future__ import annotations

import math

UNKNOWN = "–"


def number(value: float | None, digits: int, sign: bool = False) -> str:
    """A number with fixed decimals, or a dash."""
    if value is None or not math.isfinite(value):
        return UNKNOWN
    return f"{value:+.{digits}f}" if sign else f"{value:.{digits}f}"


def with_error(value: float | None, error: float | None, digits: int) -> str:
    """``value ± error``; without a value a dash, without an error the value alone."""
    if value is None or error is None or not math.isfinite(error):
        return number(value, digits)
    return f"{number(value, digits)} ± {number(error, digits)}"


def ut(mjd: float | None) -> str:
    """Hours and minutes (UTC) of a moment."""
    if mjd is None or not math.isfinite(mjd):
        return UNKNOWN
    minutes = math.floor((mjd % 1.0) * 1440.0 + 0.5) % 1440
    return f"{minutes // 60:02d}:{minutes % 60:02d}"


def exposure_text(n: int, exposure_s: float) -> str:
    """``120 s`` or ``3 × 120 s``."""
    return f"{n} × {exposure_s:.0f} s" if n > 1 else f"{exposure_s:.0f} s"


def count(n: int, word: str) -> str:
    """``1 night``, ``2 nights``."""
    return f"{n} {word}" if n == 1 else f"{n} {word}s"
