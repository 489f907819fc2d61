"""Points with error bars and fitted curves turned into character cells (numpy; no Textual)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil, floor, log10

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int32]
Floats = NDArray[np.float64]

_DOT = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]], dtype=np.int32)
"""Bit of each braille dot, [row 0-3, column 0-1]."""


@dataclass(frozen=True, slots=True)
class Marks:
    """Points of one look. ``markers`` holds one character a point; NaN errors draw no bar."""

    label: str
    colour: str
    x: Sequence[float]
    y: Sequence[float]
    err: Sequence[float] | None
    markers: str


@dataclass(frozen=True, slots=True)
class Line:
    """A curve, and its one sigma band when known."""

    colour: str
    x: Sequence[float] | Floats
    y: Sequence[float] | Floats
    sigma: Sequence[float] | Floats | None = None


@dataclass(frozen=True, slots=True)
class Limits:
    """What the edges of a chart stand for."""

    x0: float
    x1: float
    y0: float
    y1: float


@dataclass(frozen=True, slots=True)
class Cells:
    """Character codes and index of the colour of each cell, both (rows, columns); -1 is no colour."""

    code: Ints
    owner: Ints


def limits_of(
    marks: Sequence[Marks], lines: Sequence[Line], least_y: float, x_limits: tuple[float, float] | None = None
) -> Limits:
    """Limits that hold every finite point with its error bar, and curves as far as they stay near the points.

    ``least_y`` is the smallest range of y, so that three equal points are not drawn as noise. Between given limits of
    x, only what lies there counts.
    """
    low_x, high_x = x_limits or (-np.inf, np.inf)
    xs: list[Floats] = []
    ys: list[Floats] = []
    for m in marks:
        x, y = np.asarray(m.x, float), np.asarray(m.y, float)
        err = np.zeros_like(y) if m.err is None else np.nan_to_num(np.asarray(m.err, float))
        here = _between(x, low_x, high_x) & np.isfinite(y)
        xs.append(x[here])
        ys += [(y - err)[here], (y + err)[here]]
    x, y = (np.concatenate([v[np.isfinite(v)] for v in vs] or [np.zeros(0)]) for vs in (xs, ys))
    if x.size == 0:
        x = np.concatenate([np.asarray(line.x, float) for line in lines] or [np.zeros(0)])
        y = np.concatenate([np.asarray(line.y, float) for line in lines] or [np.zeros(0)])
        y, x = y[np.isfinite(y) & _between(x, low_x, high_x)], x[np.isfinite(x) & _between(x, low_x, high_x)]
    if x.size == 0 or y.size == 0:
        return Limits(*(x_limits or (0.0, 1.0)), 0.0, 1.0)
    x_pad = 0.03 * float(np.ptp(x)) or 1.0
    x0, x1 = x_limits or (float(x.min()) - x_pad, float(x.max()) + x_pad)
    near = [np.asarray(line.y, float)[_between(line.x, x0, x1)] for line in lines]
    y = np.concatenate([y, *(v[np.isfinite(v)] for v in near)])
    y_pad = max(0.05 * float(np.ptp(y)), 0.5 * (least_y - float(np.ptp(y))), 1e-6)
    return Limits(x0, x1, float(y.min()) - y_pad, float(y.max()) + y_pad)


def _between(x: Sequence[float] | Floats, low: float, high: float) -> NDArray[np.bool_]:
    values = np.asarray(x, float)
    return (values >= low) & (values <= high)


def ticks(low: float, high: float, wanted: int) -> tuple[list[float], int]:
    """Ticks at steps of 1, 2 or 5 times a power of ten inside the range, and the decimals they need.

    At least two of them, for a single one does not say the scale.
    """
    raw = (high - low) / max(wanted, 1)
    if not np.isfinite(raw) or raw <= 0:
        return [], 0
    power = 10.0 ** floor(log10(raw))
    widest = next(s for s in (1, 2, 5, 10) if s * power >= raw * (1 - 1e-9))
    for factor in (10, 5, 2, 1, 0.5, 0.2):
        step = factor * power
        values = [i * step for i in range(ceil(low / step), floor(high / step) + 1)]
        if factor <= widest and len(values) >= 2:
            break
    return values, max(0, -floor(log10(step) + 1e-9))


def braille_codes(dots: NDArray[np.bool_]) -> Ints:
    """Characters, (rows / 4, columns / 2), of a raster of dots."""
    rows, columns = dots.shape
    groups = dots.reshape(rows // 4, 4, columns // 2, 2).transpose(0, 2, 1, 3)
    bits = np.where(groups, _DOT, 0).sum(axis=(2, 3), dtype=np.int32)
    return np.where(bits > 0, 0x2800 + bits, ord(" ")).astype(np.int32)


class Canvas:
    """A raster of cells; fine cells hold 2 × 4 braille dots, plain ones a single character."""

    def __init__(self, width: int, height: int, limits: Limits, *, invert_y: bool, plain: bool) -> None:
        self._sub_x, self._sub_y = (1, 1) if plain else (2, 4)
        self._plain, self._invert_y, self._limits = plain, invert_y, limits
        self._nx, self._ny = width * self._sub_x, height * self._sub_y
        self._dots = np.zeros((height, width), np.int32)
        self._text = np.zeros((height, width), np.int32)
        self._owner = np.full((height, width), -1, np.int32)

    def _x(self, x: Sequence[float] | Floats) -> Floats:
        lim = self._limits
        return (np.asarray(x, float) - lim.x0) / (lim.x1 - lim.x0) * (self._nx - 1)

    def _y(self, y: Sequence[float] | Floats) -> Floats:
        lim = self._limits
        part = (np.asarray(y, float) - lim.y0) / (lim.y1 - lim.y0)
        return (part if self._invert_y else 1.0 - part) * (self._ny - 1)

    def _dot(self, px: Floats, py: Floats, owner: int, character: str) -> None:
        good = np.isfinite(px) & np.isfinite(py)
        x, y = np.rint(px[good]).astype(int), np.rint(py[good]).astype(int)
        good = (x >= 0) & (x < self._nx) & (y >= 0) & (y < self._ny)
        x, y = x[good], y[good]
        row, column = y // self._sub_y, x // self._sub_x
        if self._plain:
            self._text[row, column] = ord(character)
        else:
            np.bitwise_or.at(self._dots, (row, column), _DOT[y % 4, x % 2])
        self._owner[row, column] = owner

    def line(self, line: Line, owner: int) -> None:
        """Draw a curve without gaps, and the edges of its band as a sparse trail."""
        px = self._x(line.x)
        column = np.arange(self._nx, dtype=float)
        if line.sigma is not None:
            for sign in (-1.0, 1.0):
                edge = np.asarray(line.y, float) + sign * np.asarray(line.sigma, float)
                row = np.interp(column, px, self._y(edge), left=np.nan, right=np.nan)
                step = 2 if self._plain else 3
                self._dot(column[::step], row[::step], owner, ":")
        row = np.interp(column, px, self._y(line.y), left=np.nan, right=np.nan)
        good = np.isfinite(row)
        column, rows = column[good], np.clip(np.rint(row[good]), -1, self._ny).astype(int)
        if column.size < 2:
            return
        low, high = np.minimum(rows[:-1], rows[1:]), np.maximum(rows[:-1], rows[1:])
        n = np.maximum(high - low, 1)
        self._dot(np.repeat(column[1:], n), _runs(low, n), owner, ".")

    def bars(self, marks: Marks, owner: int) -> None:
        """Draw the error bars of points."""
        if marks.err is None:
            return
        y, err = np.asarray(marks.y, float), np.asarray(marks.err, float)
        px, one, two = self._x(marks.x), self._y(y - err), self._y(y + err)
        good = np.isfinite(px) & np.isfinite(one) & np.isfinite(two)
        low = np.clip(np.rint(np.minimum(one, two)[good]), -1, self._ny).astype(int)
        high = np.clip(np.rint(np.maximum(one, two)[good]), -1, self._ny).astype(int)
        n = high - low + 1
        self._dot(np.repeat(px[good], n), _runs(low, n), owner, "|")

    def markers(self, marks: Marks, owner: int) -> None:
        """Write the character of each point into its cell."""
        for (row, column), character in zip(self.cells_at(marks.x, marks.y), marks.markers, strict=True):
            if row >= 0:
                self._text[row, column] = ord(character)
                self._owner[row, column] = owner

    def cells_at(self, x: Sequence[float], y: Sequence[float]) -> list[tuple[int, int]]:
        """Cell (row, column) of each point, (-1, -1) when it is outside."""
        cells = []
        for px, py in zip(self._x(x), self._y(y), strict=True):
            inside = np.isfinite(px) and np.isfinite(py) and -0.5 <= px < self._nx and -0.5 <= py < self._ny
            cells.append((round(py) // self._sub_y, round(px) // self._sub_x) if inside else (-1, -1))
        return cells

    def cells(self) -> Cells:
        """What was drawn: text above dots above nothing."""
        dots = np.where(self._dots > 0, 0x2800 + self._dots, ord(" "))
        return Cells(np.where(self._text > 0, self._text, dots).astype(np.int32), self._owner)


def _runs(start: NDArray[np.int_], n: NDArray[np.int_]) -> Floats:
    """start[0], start[0]+1, … n[0] of them, then start[1] …"""
    total = int(n.sum())
    return (np.arange(total) - np.repeat(np.cumsum(n) - n, n) + np.repeat(start, n)).astype(float)
