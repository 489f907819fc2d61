"""The time that a shutter adds to every exposure, pixel by pixel, from flats of short and of long exposure.

A pixel that is exposed for t + δ instead of t is too bright by δ/t: among flats of several exposures, each divided by
its own level, every part of the frame is a straight line in 1/t, whatever the lamp or the twilight did. Only the
shape of δ shows; its middle is set to 0, as a common delay is a matter of the zero point.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reduce.frames.flats import Prepare
from reduce.frames.master_pixels import block_medians, enlarged
from reduce.frames.reader import Frame
from reduce.records import Floats, Image

BLOCKS = 24
"""Blocks a side that δ is found for; between them it is interpolated."""
SIGNIFICANT = 1.5
"""Scatter of δ over the blocks, over its error, from which on it is taken for real."""


def shutter_map(frames: Sequence[Frame], prepare: Sequence[Prepare], notes: list[str]) -> Image:
    """δ of every pixel, seconds, (ny, nx); 0 everywhere where the flats show none, and ``notes`` says what was found.

    Parameters
    ----------
    frames, prepare
        Usable flats of known exposures, and how to free each of its pedestal and level.
    """
    grids, lengths = [], []
    for frame, made in zip(frames, prepare, strict=True):
        ny = frame.info.ny
        grid, _ = block_medians(made(frame.read_rows(0, ny), 0, ny), BLOCKS)
        grids.append(grid / np.median(grid))
        lengths.append(frame.info.exposure_s or np.nan)
    shape = frames[0].info.ny, frames[0].info.nx
    delay_s, err_s = _slopes(np.array(grids), 1.0 / np.array(lengths))
    spread = float(np.ptp(np.percentile(delay_s, [2.0, 98.0])))
    if not float(np.std(delay_s)) > SIGNIFICANT * err_s:
        notes.append(f"no shutter time is seen above {1000.0 * spread:.1f} ms.")
        return np.zeros(shape, np.float32)
    notes.append(f"the shutter's own time differs by {1000.0 * spread:.0f} ms over the frame.")
    return enlarged(delay_s - float(np.median(delay_s)), shape)


def _slopes(grids: Floats, per_s: Floats) -> tuple[Floats, float]:
    """Slope of each block over its value at 1/t = 0, and the typical error of that."""
    x = per_s - per_s.mean()
    xx = float(np.sum(x**2))
    mean = grids.mean(axis=0)
    slope = np.tensordot(x, grids - mean, axes=1) / xx
    residual = grids - mean - x[:, None, None] * slope
    sigma = float(np.sqrt(np.sum(residual**2) / max(1, (len(x) - 2) * mean.size)))
    intercept = mean - slope * per_s.mean()
    return slope / intercept, sigma / np.sqrt(xx)
