"""Sections of an image as headers write them: ``[x1:x2,y1:y2]``, 1-based, both ends included."""

from __future__ import annotations

import re
from dataclasses import dataclass

_SECTION = re.compile(r"^\[\s*(\d+)\s*:\s*(\d+)\s*,\s*(\d+)\s*:\s*(\d+)\s*\]$")


@dataclass(frozen=True, slots=True)
class Section:
    """Half-open pixel ranges, 0-based; ``flip_x``: the header counts the columns downwards, ``flip_y``: the rows."""

    x0: int
    x1: int
    y0: int
    y1: int
    flip_x: bool = False
    flip_y: bool = False

    @property
    def nx(self) -> int:
        """Columns."""
        return self.x1 - self.x0

    @property
    def ny(self) -> int:
        """Rows."""
        return self.y1 - self.y0

    def lies_on(self, nx: int, ny: int) -> bool:
        """Whether an image of this size holds it."""
        return self.x1 <= nx and self.y1 <= ny


def section_of(text: str) -> Section | None:
    """What a header's words for a section mean, None when they are none."""
    match = _SECTION.match(text.strip())
    if match is None:
        return None
    x1, x2, y1, y2 = map(int, match.groups())
    if min(x1, x2, y1, y2) < 1:
        return None
    return Section(min(x1, x2) - 1, max(x1, x2), min(y1, y2) - 1, max(y1, y2), x2 < x1, y2 < y1)
