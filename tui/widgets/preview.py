"""A frame as a small picture: half blocks in sixteen greys, or a ramp of plain characters."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from typing import TYPE_CHECKING

from rich.segment import Segment
from rich.style import Style
from textual.strip import Strip
from textual.widget import Widget

if TYPE_CHECKING:
    from tui.preview_image import PreviewImage

LEVELS = 16
_RAMP = " .:-=+*#%@"
_FIRST_GREY = 232  # of the 24 greys at the end of the 256-colour palette


@cache
def _greys(top: int, bottom: int) -> Style:
    step = 23 / (LEVELS - 1)
    first, second = (_FIRST_GREY + round(level * step) for level in (top, bottom))
    return Style.parse(f"color({first}) on color({second})")


class Preview(Widget):
    """Shows a `PreviewImage` with brackets around named positions, or one sentence instead."""

    def __init__(self, id: str | None = None) -> None:
        super().__init__(id=id)
        self._image: PreviewImage | None = None
        self._rings: tuple[tuple[float, float, str, str], ...] = ()
        self._sentence = ""
        self._plain = False
        self._rows: list[Strip] = []
        self._drawn_for: tuple[int, int] | None = None

    def show(
        self,
        image: PreviewImage | None,
        rings: Sequence[tuple[float, float, str, str]],
        sentence: str,
        plain: bool,
    ) -> None:
        """Show an image with rings (x_px, y_px, two brackets, colour), or the sentence when there is none."""
        self._image, self._rings, self._sentence, self._plain = image, tuple(rings), sentence, plain
        self._drawn_for = None
        self.refresh()

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
            words = [self._sentence[i : i + width] for i in range(0, len(self._sentence), max(width, 1))]
            return [Strip([Segment(line)]).adjust_cell_length(width) for line in words]
        from tui.preview_image import grey_levels, shrink

        if width < 2 or height < 1:
            return []
        # two blocks above each other fill a cell, which keeps the pixels square
        small = shrink(self._image.data, width, 2 * height).data
        data = small[::-1]
        data = data[: data.shape[0] - data.shape[0] % 2] if data.shape[0] > 1 else data.repeat(2, axis=0)
        level = grey_levels(data, len(_RAMP) if self._plain else LEVELS)
        rows, columns = data.shape[0] // 2, data.shape[1]
        cells: list[list[tuple[str, Style | None]]] = []
        for row in range(rows):
            pairs = zip(level[2 * row].tolist(), level[2 * row + 1].tolist(), strict=True)
            if self._plain:
                cells.append([(_RAMP[max(top, bottom)], None) for top, bottom in pairs])
            else:
                cells.append([("▀" if t != b else " ", _greys(t, b)) for t, b in pairs])
        for x_px, y_px, brackets, colour in self._rings:
            column = int((x_px + 0.5) / self._image.frame_nx * columns)
            row = rows - 1 - int((y_px + 0.5) / self._image.frame_ny * rows)
            for place, bracket in ((column - 1, brackets[0]), (column + 1, brackets[1])):
                if 0 <= row < rows and 0 <= place < columns:
                    cells[row][place] = (bracket, Style(color=colour, bold=True))
        return [
            Strip([Segment(text, style) for text, style in line]).simplify().adjust_cell_length(width) for line in cells
        ]
