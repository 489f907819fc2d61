"""Light between the pixels: quintic splines through cut-outs (Unser 1999, IEEE Signal Proc. 16, 22), and the way back
for their noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats

REACH_PX = 3
"""Pixels on either side that a quintic spline needs."""


@dataclass(frozen=True, slots=True)
class Affine:
    """Pixel of one frame to pixel of another: ``q = matrix · (p - p0) + q0``."""

    matrix: tuple[tuple[float, float], tuple[float, float]]
    p0: tuple[float, float]
    q0: tuple[float, float]

    def __call__(self, x_px: Floats, y_px: Floats) -> tuple[Floats, Floats]:
        """Positions on the other frame."""
        (a, b), (c, d) = self.matrix
        dx, dy = x_px - self.p0[0], y_px - self.p0[1]
        return self.q0[0] + a * dx + b * dy, self.q0[1] + c * dx + d * dy

    @property
    def area(self) -> float:
        """Pixels of the other frame in one pixel of this."""
        (a, b), (c, d) = self.matrix
        return abs(a * d - b * c)


@dataclass(frozen=True, slots=True)
class Sampling:
    """Where and with which weights the spline coefficients of one cut-out are read; all arrays (36, n)."""

    shape: tuple[int, int]
    pixel: NDArray[np.int64]
    """Flat index into the cut-out."""
    weight: Floats
    """0 for positions outside the cut-out."""
    inside: NDArray[np.bool_]
    """(n,) that the nearest pixel lies on the cut-out."""

    def read(self, values: Floats) -> Floats:
        """(n,) interpolated values of a (ny, nx) cut-out; what lies outside counts as 0."""
        flat = _filtered(values).ravel()
        total = np.zeros(self.pixel.shape[1])
        for pixel, weight in zip(self.pixel, self.weight, strict=True):
            total += weight * flat[pixel]
        return total

    def back(self, weights: Floats) -> Floats:
        """(ny, nx) weights on the cut-out's own pixels that give the same sum as (n,) ``weights`` on the values read.

        The spline's filter is its own transpose, but for the outermost pixels.
        """
        ny, nx = self.shape
        spread = np.bincount(self.pixel.ravel(), (self.weight * weights).ravel(), ny * nx)
        return _filtered(np.asarray(spread, np.float64).reshape(ny, nx))


def sampling(x_px: Floats, y_px: Floats, shape: tuple[int, int]) -> Sampling:
    """Weights to read a cut-out of ``shape`` at (n,) positions in its own pixels.

    The weights of each position add up to 1, so a flat sky stays flat.
    """
    ny, nx = shape
    steps = np.arange(1 - REACH_PX, REACH_PX + 1)[:, None]
    columns, rows = np.floor(x_px).astype(np.int64) + steps, np.floor(y_px).astype(np.int64) + steps
    across, along = _spline(x_px - columns), _spline(y_px - rows)
    inside = (x_px > -0.5) & (x_px < nx - 0.5) & (y_px > -0.5) & (y_px < ny - 0.5)
    weight = np.where(inside, along[:, None, :] * across[None, :, :], 0.0).reshape(-1, len(x_px))
    pixel = (_mirrored(rows, ny)[:, None, :] * nx + _mirrored(columns, nx)[None, :, :]).reshape(-1, len(x_px))
    return Sampling(shape, pixel, weight, inside)


def _filtered(values: Floats) -> Floats:
    from scipy.ndimage import spline_filter

    return np.asarray(spline_filter(values, 5, np.float64), np.float64)  # its border is mirrored


def _mirrored(index: NDArray[np.int64], n: int) -> NDArray[np.int64]:
    """Indices beyond the border turned back about the outermost pixel."""
    index = np.abs(index)
    return np.asarray(np.clip(np.where(index > n - 1, 2 * (n - 1) - index, index), 0, n - 1))


def _spline(offset: Floats) -> Floats:
    """The centred quintic B-spline, by truncated powers."""
    t = np.maximum(REACH_PX - np.abs(offset), 0.0)
    inner, core = np.maximum(t - 1.0, 0.0), np.maximum(t - 2.0, 0.0)
    return np.asarray((t**5 - 6.0 * inner**5 + 15.0 * core**5) / 120.0)
