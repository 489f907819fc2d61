"""A frame made small enough to be shown in character cells."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class PreviewImage:
    """A shrunk frame; row 0 of ``data`` is the frame's first row (shown at the bottom)."""

    data: NDArray[np.float32]
    """(rows, columns), the brightest pixel of each block, so that stars survive."""
    frame_nx: int
    frame_ny: int


def shrink(image: NDArray[np.float32], nx: int, ny: int) -> PreviewImage:
    """Reduce (frame_ny, frame_nx) to at most ny × nx square blocks, each its brightest pixel."""
    frame_ny, frame_nx = image.shape
    scale = max(frame_nx / max(nx, 1), frame_ny / max(ny, 1), 1.0)
    columns, rows = max(1, int(frame_nx / scale)), max(1, int(frame_ny / scale))
    y_edges = np.linspace(0, frame_ny, rows + 1).astype(int)[:-1]
    x_edges = np.linspace(0, frame_nx, columns + 1).astype(int)[:-1]
    data = np.fmax.reduceat(np.fmax.reduceat(image, y_edges, axis=0), x_edges, axis=1)
    return PreviewImage(data.astype(np.float32), frame_nx, frame_ny)


def grey_levels(data: NDArray[np.float32], levels: int) -> NDArray[np.int16]:
    """Grey level 0 … levels - 1 of each block: an asinh stretch between the sky and the brightest 0.3 %."""
    finite = data[np.isfinite(data)]
    if finite.size == 0:
        return np.zeros(data.shape, np.int16)
    sky = float(np.median(finite))
    scatter = 1.4826 * float(np.median(np.abs(finite - sky)))
    low, high = sky - scatter, float(np.percentile(finite, 99.7))
    unit = np.clip((np.nan_to_num(data, nan=low) - low) / max(high - low, 1e-9), 0.0, 1.0)
    bright = np.arcsinh(10.0 * unit) / np.arcsinh(10.0)
    level: NDArray[np.int16] = np.minimum(bright * levels, levels - 1).astype(np.int16)
    return level
