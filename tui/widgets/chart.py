"""A chart in character cells: letters as markers, honest error bars, magnitudes upside down where wanted."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from rich.segment import Segment
from rich.style import Style
from textual.strip import Strip
from textual.widget import Widget

from tui.widgets.raster import Canvas, Cells, Limits, Line, Marks, limits_of, ticks

GUTTER = 7
_DIM = Style(dim=True)


class Chart(Widget):
    """Draws marks and lines; draws again only when its data, size or characters change."""

    def __init__(
        self,
        title: str,
        *,
        invert_y: bool = False,
        least_y: float = 0.02,
        x_label: str = "",
        legend: bool = True,
        x_axis: bool = True,
        zero_line: bool = False,
        symmetric: bool = False,
        x_wraps_at: float | None = None,
        id: str | None = None,
    ) -> None:
        super().__init__(id=id)
        self._title, self._invert_y, self._least_y = title, invert_y, least_y
        self._x_label, self._legend, self._x_axis, self._zero_line = x_label, legend, x_axis, zero_line
        self._x_wraps_at = x_wraps_at
        self._symmetric = symmetric
        self._marks: tuple[Marks, ...] = ()
        self._lines: tuple[Line, ...] = ()
        self._x_limits: tuple[float, float] | None = None
        self._cursor: tuple[float, float] | None = None
        self._plain = False
        self._empty = ""
        self._rows: list[Strip] = []
        self._drawn_for: tuple[int, int] | None = None

    def show(
        self,
        marks: Sequence[Marks],
        lines: Sequence[Line] = (),
        *,
        plain: bool,
        cursor: tuple[float, float] | None = None,
        x_limits: tuple[float, float] | None = None,
        title: str | None = None,
        x_label: str | None = None,
        empty: str = "Nothing to draw yet.",
    ) -> None:
        """Show new data; ``cursor`` is the (x, y) of the point to stress, ``empty`` stands for no data."""
        self._marks, self._lines, self._plain = tuple(marks), tuple(lines), plain
        self._cursor, self._x_limits, self._empty = cursor, x_limits, empty
        if title is not None:
            self._title = title
        if x_label is not None:
            self._x_label = x_label
        self._drawn_for = None
        self.refresh()

    def limits(self) -> Limits:
        """Limits of the present data, those of y from what is within the limits of x."""
        found = limits_of(self._marks, self._lines, self._least_y, self._x_limits)
        if self._symmetric:
            reach = max(abs(found.y0), abs(found.y1))
            return Limits(found.x0, found.x1, -reach, reach)
        return found

    def render_line(self, y: int) -> Strip:
        """One row, from the drawing made for the present size."""
        size = (self.size.width, self.size.height)
        if self._drawn_for != size:
            self._rows = self._draw(*size)
            self._drawn_for = size
        strip = self._rows[y] if y < len(self._rows) else Strip.blank(size[0])
        return strip.apply_style(self.rich_style)

    def _draw(self, width: int, height: int) -> list[Strip]:
        columns, rows = width - GUTTER, height - int(self._legend) - 2 * int(self._x_axis)
        if columns < 8 or rows < 2:
            return [Strip([Segment("(too small)"[:width])]).adjust_cell_length(width)]
        if not any(len(m.x) for m in self._marks) and not self._lines:
            return [Strip([Segment(t[:width])]).adjust_cell_length(width) for t in (self._title, self._empty)]
        limits = self.limits()
        cells, styles = self._cells(columns, rows, limits)
        strips = [self._legend_row()] if self._legend else []
        strips += self._plot_rows(cells, styles, limits)
        if self._x_axis:
            strips += self._axis_rows(limits, columns)
        return [strip.adjust_cell_length(width) for strip in strips]

    def _cells(self, columns: int, rows: int, limits: Limits) -> tuple[Cells, list[Style]]:
        canvas = Canvas(columns, rows, limits, invert_y=self._invert_y, plain=self._plain)
        colours = [marks.colour for marks in self._marks] + [line.colour for line in self._lines]
        styles = [Style(color=colour) for colour in colours]
        if self._zero_line:
            styles.append(_DIM)
            canvas.line(Line("", [limits.x0, limits.x1], [0.0, 0.0]), len(styles) - 1)
        for owner, line in enumerate(self._lines, len(self._marks)):
            canvas.line(line, owner)
        for owner, marks in enumerate(self._marks):
            canvas.bars(marks, owner)
        for owner, marks in enumerate(self._marks):
            canvas.markers(marks, owner)
        cells = canvas.cells()
        if self._cursor is not None:
            ((row, column),) = canvas.cells_at([self._cursor[0]], [self._cursor[1]])
            if row >= 0:
                owner = int(cells.owner[row, column])
                styles.append((styles[owner] if owner >= 0 else Style()) + Style(reverse=True, bold=True))
                cells.owner[row, column] = len(styles) - 1
        return cells, styles

    def _legend_row(self) -> Strip:
        segments = [Segment(self._title + "  ")]
        segments += [Segment(f"{m.label}  ", Style(color=m.colour)) for m in self._marks if m.label]
        return Strip(segments)

    def _plot_rows(self, cells: Cells, styles: list[Style], limits: Limits) -> list[Strip]:
        rows, columns = cells.code.shape
        labels = [""] * rows
        values, decimals = ticks(limits.y0, limits.y1, max(2, rows // 3))
        for value in values:
            part = (value - limits.y0) / (limits.y1 - limits.y0)
            labels[round((part if self._invert_y else 1 - part) * (rows - 1))] = f"{value:.{decimals}f}"
        if not self._legend:
            free = labels.index("") if "" in labels else 0
            labels[free] = self._title
        wall, mark = ("|", "+") if self._plain else ("│", "┤")
        strips = []
        for row in range(rows):
            is_tick = labels[row] not in ("", self._title)
            segments = [
                Segment(labels[row][: GUTTER - 1].rjust(GUTTER - 1)),
                Segment(mark if is_tick else wall, _DIM),
            ]
            owner, code = cells.owner[row], cells.code[row]
            cuts = [0, *(np.flatnonzero(np.diff(owner)) + 1).tolist(), columns]
            for start, stop in pairwise(cuts):
                text = "".join(map(chr, code[start:stop]))
                segments.append(Segment(text, styles[owner[start]] if owner[start] >= 0 else None))
            strips.append(Strip(segments))
        return strips

    def _axis_rows(self, limits: Limits, columns: int) -> list[Strip]:
        corner, run, mark = ("+", "-", "+") if self._plain else ("└", "─", "┬")
        axis, text = [run] * columns, [" "] * (columns + GUTTER)
        values, decimals = ticks(limits.x0, limits.x1, max(2, columns // 14))
        text[: len(self._x_label)] = self._x_label[: len(text)]
        for value in values:
            column = round((value - limits.x0) / (limits.x1 - limits.x0) * (columns - 1))
            axis[column] = mark
            label = f"{value if self._x_wraps_at is None else value % self._x_wraps_at:.{decimals}f}"
            start = min(max(0, GUTTER + column - len(label) // 2), len(text) - len(label))
            if all(character == " " for character in text[max(0, start - 1) : start + len(label)]):
                text[start : start + len(label)] = label
        return [
            Strip([Segment(" " * (GUTTER - 1)), Segment(corner + "".join(axis), _DIM)]),
            Strip([Segment("".join(text))]),
        ]
