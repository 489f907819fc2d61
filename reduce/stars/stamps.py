"""Square cut-outs of many stars as one array, so that stars are measured together instead of one by one."""

from __future__ import annotations

from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

S = TypeVar("S", bound=np.generic)


def cut_out(image: NDArray[S], x_px: NDArray[Any], y_px: NDArray[Any], half: int, fill: float) -> NDArray[S]:
    """(n, 2 half + 1, 2 half + 1) cut-outs centred on the nearest pixels; ``fill`` outside the image."""
    ny, nx = image.shape
    offsets = np.arange(-half, half + 1)
    rows = np.rint(y_px).astype(int)[:, None] + offsets
    columns = np.rint(x_px).astype(int)[:, None] + offsets
    inside = ((rows >= 0) & (rows < ny))[:, :, None] & ((columns >= 0) & (columns < nx))[:, None, :]
    found = image[np.clip(rows, 0, ny - 1)[:, :, None], np.clip(columns, 0, nx - 1)[:, None, :]]
    return np.where(inside, found, np.asarray(fill, dtype=image.dtype))


def offsets_of(x_px: NDArray[Any], y_px: NDArray[Any], half: int) -> tuple[NDArray[Any], NDArray[Any]]:
    """(n, 1, size) and (n, size, 1) offsets of the cut-outs' pixels from the exact positions."""
    grid = np.arange(-half, half + 1, dtype=float)
    dx = grid[None, None, :] - (x_px - np.rint(x_px))[:, None, None]
    dy = grid[None, :, None] - (y_px - np.rint(y_px))[:, None, None]
    return dx, dy
