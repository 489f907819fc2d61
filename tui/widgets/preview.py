"""A frame as a small picture: half blocks in sixteen greys, braille dots, or a ramp of plain characters."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from textwrap import wrap
from typing import TYPE_CHECKING, Literal

from rich.segment import Segment
from rich.style import Style
from textual.strip import Strip
from textual.widget import Widget

if TYPE_CHECKING:
    from reduce.records import Floats
    from tui.preview_image import PreviewImage

Look = Literal["blocks", "braille", "plain"]
LEVELS = 16
_RAMP = " .:-=+*#%@"
_FIRST_GREY = 232  # of the 24 greys at the end of the 256-colour palette
_LEAST_RADIUS_CELLS = 1.5
"""A smaller circle is drawn as two brackets."""
_CURSOR = Style(reverse=True, bold=True)

Cell = tuple[str, Style | None]


@cache
def _greys(top: int, bottom: int) -> Style:
    step = 23 / (LEVELS - 1)
    first, second = (_FIRST_GREY + round(level * step) for level in (top, bottom))
    return Style.parse(f"color({first}) on color({second})")


@dataclass(frozen=True, slots=True)
class Ring:
    """A position on the frame: brackets around it, or a circle where one can be drawn."""

    x_px: float
    y_px: float
    brackets: str
    """Left and right one."""
    colour: str
    radius_px: float = 0.0
    """Of the aperture; 0: none."""


@dataclass(frozen=True, slots=True)
class Place:
    """Where a part of a frame lies on the widget: cells from its lower left corner."""

    x0_px: float
    y0_px: float
    columns: int
    rows: int
    pixels_x: float
    """Frame pixels a column."""
    pixels_y: float
    """Frame pixels a row of cells."""

    def cell_of(self, x_px: float, y_px: float) -> tuple[int, int]:
        """(row, column) of a frame position, 0-based from the top; outside the picture where it is not on it."""
        column = math.floor((x_px + 0.5 - self.x0_px) / self.pixels_x)
        return self.rows - 1 - math.floor((y_px + 0.5 - self.y0_px) / self.pixels_y), column

    def position_of(self, row: float, column: float) -> tuple[float, float]:
        """Frame position of the middle of a cell."""
        x_px = self.x0_px + (column + 0.5) * self.pixels_x - 0.5
        return x_px, self.y0_px + (self.rows - row - 0.5) * self.pixels_y - 0.5

    def holds(self, row: int, column: int) -> bool:
        """Whether a cell is on the picture."""
        return 0 <= row < self.rows and 0 <= column < self.columns


class Preview(Widget):
    """Shows a `PreviewImage` with rings around named positions, or one sentence instead."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._image: PreviewImage | None = None
        self._rings: tuple[Ring, ...] = ()
        self._cursor: tuple[float, float] | None = None
        self._sentence = ""
        self._look: Look = "blocks"
        self._ground: tuple[list[list[Cell]], Place] | None = None
        self._rows: list[Strip] = []
        self._drawn_for: tuple[int, int] | None = None

    def show(
        self,
        image: PreviewImage | None,
        rings: Sequence[Ring],
        sentence: str,
        look: Look,
        cursor: tuple[float, float] | None = None,
    ) -> None:
        """Show an image with rings and a cursor at a frame position, or the sentence when there is none."""
        if image is not self._image or look != self._look:
            self._ground = None
        self._image, self._rings, self._sentence, self._look = image, tuple(rings), sentence, look
        self._cursor = cursor
        self._drawn_for = None
        self.refresh()

    def place(self) -> Place | None:
        """Where the image lies at the present size; None: there is none."""
        width, height = self.size.width, self.size.height
        if self._image is None or width < 2 or height < 1:
            return None
        if self._drawn_for != (width, height):
            self._ground = None
        if self._ground is None:
            self._ground = self._cells(self._image, width, height)
        return self._ground[1]

    def render_line(self, y: int) -> Strip:
        """One row, from the drawing made for the present size."""
        size = (self.size.width, self.size.height)
        if self._drawn_for != size:
            self._rows = self._draw(*size)
            self._drawn_for = size
        strip = self._rows[y] if y < len(self._rows) else Strip.blank(size[0])
        return strip.apply_style(self.rich_style)

    def _draw(self, width: int, height: int) -> list[Strip]:
        if self._image is None:
            words = wrap(self._sentence, max(width, 1))
            return [Strip([Segment(line)]).adjust_cell_length(width) for line in words]
        if width < 2 or height < 1:
            return []
        if self._ground is None or (self._ground[1].columns > width or self._ground[1].rows > height):
            self._ground = self._cells(self._image, width, height)
        ground, place = self._ground
        cells = [list(row) for row in ground]
        # on the grey of the sky a mark changes one colour only, which costs the fewest bytes
        ground_colour = f"color({_FIRST_GREY})" if self._look == "blocks" else None
        for ring in self._rings:
            for row, column, character in ring_cells(ring, place, self._look == "plain"):
                if place.holds(row, column):
                    cells[row][column] = (character, Style(color=ring.colour, bgcolor=ground_colour))
        if self._cursor is not None:
            row, column = place.cell_of(*self._cursor)
            if place.holds(row, column):
                under = cells[row][column][0]
                cells[row][column] = (under if under in "()[]" else "+", _CURSOR)
        return [
            Strip([Segment(text, style) for text, style in line]).simplify().adjust_cell_length(width) for line in cells
        ]

    def _cells(self, image: PreviewImage, width: int, height: int) -> tuple[list[list[Cell]], Place]:
        from tui.preview_image import brightness, enlarged

        # dots or blocks a cell; both divide a cell of about 1:2 into squares
        across, down = (2, 4) if self._look == "braille" else (1, 2)
        data = enlarged(image.data, across * width, down * height, across, down)[::-1]
        x0, y0, columns, rows = image.window
        bright = brightness(data, image.stretch, columns * rows / data.size)
        shape = (len(data) // down, data.shape[1] // across)
        place = Place(x0, y0, shape[1], shape[0], columns / shape[1], rows / shape[0])
        return _dots(bright) if self._look == "braille" else _shades(bright, self._look), place


def _shades(bright: Floats, look: Look) -> list[list[Cell]]:
    from tui.preview_image import grey_levels

    level = grey_levels(bright, len(_RAMP) if look == "plain" else LEVELS)
    pairs = [
        list(zip(top.tolist(), bottom.tolist(), strict=True))
        for top, bottom in zip(level[::2], level[1::2], strict=True)
    ]
    if look == "plain":
        return [[(_RAMP[max(pair)], None) for pair in line] for line in pairs]
    return [[("▀" if top != bottom else " ", _greys(top, bottom)) for top, bottom in line] for line in pairs]


def _dots(bright: Floats) -> list[list[Cell]]:
    from tui.preview_image import dithered
    from tui.widgets.raster import braille_codes

    return [[(chr(code), None) for code in row] for row in braille_codes(dithered(bright)).tolist()]


def ring_cells(ring: Ring, place: Place, plain: bool) -> list[tuple[int, int, str]]:
    """(row, column, character) of a ring: a circle of its radius, or brackets where that is too small."""
    radius_x, radius_y = ring.radius_px / place.pixels_x, ring.radius_px / place.pixels_y
    row, column = place.cell_of(ring.x_px, ring.y_px)
    if radius_x < _LEAST_RADIUS_CELLS:
        return [(row, column - 1, ring.brackets[0]), (row, column + 1, ring.brackets[1])]
    n = max(8, int(4 * math.pi * max(radius_x, radius_y)))
    angles = [2.0 * math.pi * k / n for k in range(n)]
    cells = {
        place.cell_of(ring.x_px + ring.radius_px * math.cos(angle), ring.y_px + ring.radius_px * math.sin(angle))
        for angle in angles
    }
    return [(*cell, "." if plain else "·") for cell in sorted(cells)]
