"""Overscan: which part of a stored image saw the sky."""

from __future__ import annotations

import re
from dataclasses import dataclass

from reduce.frames.header import Header

_SECTION = re.compile(r"^\[\s*(\d+)\s*:\s*(\d+)\s*,\s*(\d+)\s*:\s*(\d+)\s*\]$")


@dataclass(frozen=True, slots=True)
class Section:
    """Half-open pixel ranges, 0-based."""

    x0: int
    x1: int
    y0: int
    y1: int

    @property
    def nx(self) -> int:
        """Columns."""
        return self.x1 - self.x0

    @property
    def ny(self) -> int:
        """Rows."""
        return self.y1 - self.y0


def trim_section(
    header: Header, axes: tuple[int, ...], trim: list[str], overscan: list[str], notes: list[str]
) -> Section | None:
    """The part to use, None for the whole image.

    The overscan is cut off and not subtracted: lights and calibration frames are treated alike, so the bias frames
    carry the level, and raw counts keep their meaning against saturation.

    Parameters
    ----------
    axes
        (nx, ny) as stored.
    trim, overscan
        Keywords of the light-sensitive part and of the overscan.
    """
    text = next((header.text(keyword) for keyword in trim if keyword in header), "")
    if not text:
        if any(keyword in header for keyword in overscan):
            notes.append("the header names an overscan but not the part that saw the sky; nothing was cut off.")
        return None
    match = _SECTION.match(text)
    if match is None:
        notes.append(f"section {text!r} cannot be read; the whole image is used.")
        return None
    x1, x2, y1, y2 = map(int, match.groups())
    if (x1, x2, y1, y2) == (1, axes[0], 1, axes[1]):
        return None
    if not (1 <= x1 < x2 <= axes[0] and 1 <= y1 < y2 <= axes[1]):
        notes.append(f"section {text} does not lie on the image; the whole image is used.")
        return None
    notes.append(f"only {text} is used: the overscan was cut off.")
    return Section(x1 - 1, x2, y1 - 1, y2)
