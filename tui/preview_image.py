"""A frame, or a part of it, made small enough to be shown in character cells."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from reduce.records import FieldSolution

Pixels = NDArray[np.float32]
Window = tuple[int, int, int, int]
"""First column, first row, columns and rows of a part of a frame."""

LINEAR_NOISE = 2.0
"""Noises above the sky up to which the stretch is about linear."""
BRIGHTEST = 0.99998
"""The share of the frame's pixels that stay below full white."""
_SAMPLED = 250_000
_BAYER = np.array([[0, 8, 2, 10], [12, 4, 14, 6], [3, 11, 1, 9], [15, 7, 13, 5]]) / 16.0
"""Ordered dither (Bayer 1973); the same from frame to frame, so that nothing flickers."""


@dataclass(frozen=True, slots=True)
class Stretch:
    """What the greys of a frame stand for, whatever part of it is shown."""

    sky: float
    noise: float
    """Of a pixel of sky."""
    top: float
    """Shown white."""


@dataclass(frozen=True, slots=True)
class PreviewImage:
    """A shrunk part of a frame; row 0 of ``data`` is its first row (shown at the bottom)."""

    data: Pixels
    """(rows, columns), the brightest pixel of each block, so that stars survive."""
    frame_nx: int
    frame_ny: int
    window: Window
    """The part of the frame that ``data`` covers."""
    stretch: Stretch


@dataclass(frozen=True, slots=True)
class Laid:
    """Another frame, to be laid on the pixels of the shown one."""

    path: str
    own: FieldSolution
    onto: FieldSolution
    nx: int
    """Of the shown frame."""
    ny: int


def stretch_of(image: Pixels) -> Stretch:
    """Median, noise and the brightest 0.002 % of a frame, from every n-th pixel of a large one."""
    step = max(1, math.isqrt(image.size // _SAMPLED))
    sample = image[::step, ::step]
    finite = sample[np.isfinite(sample)]
    if finite.size == 0:
        return Stretch(0.0, 1.0, 1.0)
    sky = float(np.median(finite))
    noise = max(1.4826 * float(np.median(np.abs(finite - sky))), 1e-3)
    return Stretch(sky, noise, max(float(np.quantile(finite, BRIGHTEST)), sky + 10.0 * noise))


def shrink(
    image: Pixels, nx: int, ny: int, window: Window | None = None, stretch: Stretch | None = None
) -> PreviewImage:
    """Reduce a part of (frame_ny, frame_nx), or all of it, to at most ny × nx square blocks, each its brightest pixel.

    ``stretch`` spares finding it again for another part of the frame.
    """
    frame_ny, frame_nx = image.shape
    x0, y0, columns, rows = clamped(window or (0, 0, frame_nx, frame_ny), frame_nx, frame_ny)
    data = blocks(image[y0 : y0 + rows, x0 : x0 + columns], nx, ny)
    return PreviewImage(data, frame_nx, frame_ny, (x0, y0, columns, rows), stretch or stretch_of(image))


def pasted(part: Pixels, x0: int, y0: int, size: tuple[int, int]) -> Pixels:
    """A part on an empty frame of (nx, ny) pixels; what lies off it is cut away."""
    nx, ny = size
    result = np.full((ny, nx), np.nan, np.float32)
    rows, columns = part.shape
    left, low = max(x0, 0), max(y0, 0)
    right, high = min(x0 + columns, nx), min(y0 + rows, ny)
    if right > left and high > low:
        result[low:high, left:right] = part[low - y0 : high - y0, left - x0 : right - x0]
    return result


def clamped(window: Window, frame_nx: int, frame_ny: int) -> Window:
    """The window moved, and where it must be shrunk, so that it lies on the frame."""
    x0, y0, columns, rows = window
    columns, rows = min(max(columns, 1), frame_nx), min(max(rows, 1), frame_ny)
    return min(max(x0, 0), frame_nx - columns), min(max(y0, 0), frame_ny - rows), columns, rows


def blocks(image: Pixels, nx: int, ny: int) -> Pixels:
    """At most ny × nx square blocks, each its brightest pixel; never more of them than pixels."""
    size_y, size_x = image.shape
    scale = max(size_x / max(nx, 1), size_y / max(ny, 1), 1.0)
    return _along(_along(image, max(1, int(size_y / scale + 1e-9)), 0), max(1, int(size_x / scale + 1e-9)), 1).astype(
        np.float32
    )


def enlarged(image: Pixels, nx: int, ny: int, across: int = 1, down: int = 1) -> Pixels:
    """Blocks that fill ny × nx as far as they can without being stretched: pixels shrunk, or repeated where few.

    Columns are a multiple of ``across`` and rows of ``down``, the dots of a character cell.
    """
    rows, columns = image.shape
    scale = min(nx / columns, ny / rows)
    wide = max(int(columns * scale + 1e-9) // across, 1) * across
    high = max(int(rows * scale + 1e-9) // down, 1) * down
    return np.ascontiguousarray(_along(_along(image, high, 0), wide, 1))


def _along(image: Pixels, n: int, axis: int) -> Pixels:
    """Resampled to n along one axis: the brightest of each stretch, or each repeated; middles decide what is where."""
    size, k = image.shape[axis], np.arange(n)
    result: Pixels
    if n > size:
        result = image.take((2 * k + 1) * size // (2 * n), axis=axis)
    else:
        result = np.fmax.reduceat(image, -((n - 2 * k * size) // (2 * n)), axis=axis)
    return result


def brightness(data: Pixels, stretch: Stretch, pixels_a_block: float) -> NDArray[np.float64]:
    """0 … 1 of each block: asinh of the light above the sky in units of its noise (Lupton et al. 2004, PASP 116, 133).

    The brightest of n pixels of empty sky lies about √(2 ln n) noises above it: black begins there, so that sky stays
    black whatever the size of the blocks.
    """
    grain = math.sqrt(2.0 * math.log(max(pixels_a_block, 1.0)))
    black = stretch.sky + stretch.noise * max(1.0, grain)
    unit = LINEAR_NOISE * stretch.noise
    white = math.asinh(max(stretch.top - black, unit) / unit)
    above = np.nan_to_num(data, nan=black, posinf=stretch.top, neginf=black).astype(np.float64) - black
    result: NDArray[np.float64] = np.clip(np.arcsinh(above / unit) / white, 0.0, 1.0)
    return result


def grey_levels(bright: NDArray[np.float64], levels: int) -> NDArray[np.int16]:
    """Grey level 0 … levels - 1."""
    level: NDArray[np.int16] = np.minimum(bright * levels, levels - 1).astype(np.int16)
    return level


def dithered(bright: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Dots whose density says the brightness."""
    rows, columns = bright.shape
    threshold = np.tile(_BAYER, (rows // 4 + 1, columns // 4 + 1))[:rows, :columns]
    return bright > threshold * 0.94 + 0.06
