"""What lies behind the stars: the frame in coarse cells, without stars and without its smooth sky."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.records import Detections, Floats, Image, Mask

CELLS = 160
"""Cells along the longer side. A line's significance per cell does not depend on their size: twice the side holds
twice the line and twice the noise."""
STAR_FWHM, BRIGHT_STAR_FWHM = 2.0, 12.0
"""Least and largest radius of the disc about a star that counts as no sky."""
WING_BETA, WING_SIGMA = 2.5, 0.1
"""The disc ends where a Moffat profile with such wings falls below this part of the noise of a pixel."""
DISC_STEPS = 6
ROUND = 1.5
"""A detection this many times more elongated than usual is no star, but perhaps a piece of a trail."""
SMOOTH_CELLS = 15
"""Side of the window whose median is the smooth sky."""
LEAST_SKY = 0.3
"""A cell with less of its pixels on the sky has no value."""


@dataclass(frozen=True, slots=True)
class Backdrop:
    """The star-free sky in cells of ``cell_px`` pixels a side."""

    cell_px: int
    sky_e_px: Floats
    """(rows, columns) mean electrons a pixel; NaN where stars and bad pixels leave too little."""
    significance: Floats
    """(rows, columns) what stands above the smooth sky, in units of the noise; NaN as above."""

    @property
    def gradient(self) -> float | None:
        """Change of the sky along its steepest direction over the frame, as a fraction of its level; None: no sky."""
        known = np.isfinite(self.sky_e_px)
        level = float(np.median(self.sky_e_px[known])) if known.any() else 0.0
        if level <= 0 or known.sum() < 9:
            return None
        rows, columns = np.nonzero(known)
        u = rows / max(self.sky_e_px.shape[0] - 1, 1) - 0.5
        v = columns / max(self.sky_e_px.shape[1] - 1, 1) - 0.5
        terms = np.stack([np.ones(len(u)), u, v])
        values, keep = self.sky_e_px[known] / level, np.ones(len(u), bool)
        plane = np.array([1.0, 0.0, 0.0])
        for _ in range(3):
            normal = np.einsum("in,jn->ij", terms[:, keep], terms[:, keep])
            plane = np.linalg.solve(normal, np.einsum("in,n->i", terms[:, keep], values[keep]))
            rest = values - np.einsum("i,in->n", plane, terms)
            keep = np.abs(rest) <= 3.0 * 1.4826 * np.median(np.abs(rest)) + 1e-12
        return float(np.hypot(plane[1], plane[2]))


def backdrop(data_e: Image, mask: Mask, stars: Detections, fwhm_px: float) -> Backdrop:
    """Cells of one frame.

    Parameters
    ----------
    data_e, mask
        (ny, nx) electrons with sky, and PixelFlag bits.
    stars
        All detections; round ones are taken out, elongated ones may be pieces of a trail and stay.
    """
    ny, nx = data_e.shape
    side = max(1, math.ceil(max(ny, nx) / CELLS))
    clear = (mask == 0) & np.isfinite(data_e)
    usual = float(np.median(stars.elongation)) if len(stars) else 1.0
    is_star = (stars.elongation <= ROUND * usual) | stars.saturated
    step = _disc_steps(data_e, clear, stars, fwhm_px)
    for k in range(DISC_STEPS):
        mine = is_star & (step == k)
        if mine.any():
            _take_out(clear, stars.x_px[mine], stars.y_px[mine], _disc_fwhm(k) * fwhm_px)
    count = _cells(clear.astype(np.float32), side)
    total = _cells(np.where(clear, data_e, np.float32(0.0)), side)
    known = count >= LEAST_SKY * side**2
    sky = np.where(known, total / np.maximum(count, 1.0), np.nan)
    above = sky - _smooth(sky)
    # Cells that lost pixels to stars are noisier; the scatter is that of a whole cell.
    scaled = above * np.sqrt(count / side**2)
    noise = 1.4826 * np.nanmedian(np.abs(scaled)) if known.any() else np.nan
    return Backdrop(side, sky, scaled / noise if noise > 0 else np.full(sky.shape, np.nan))


def _disc_fwhm(step: int | NDArray[np.int64]) -> Any:
    """Radii from the least to the largest in equal ratios."""
    return STAR_FWHM * (BRIGHT_STAR_FWHM / STAR_FWHM) ** (step / (DISC_STEPS - 1.0))


def _disc_steps(data_e: Image, clear: NDArray[np.bool_], stars: Detections, fwhm_px: float) -> NDArray[np.int64]:
    """(n,) which disc takes each star out: by its height over the noise of the sky; the largest if saturated."""
    sample = data_e[::4, ::4][clear[::4, ::4]].astype(float)
    noise = 1.4826 * float(np.median(np.abs(sample - np.median(sample)))) if len(sample) else 1.0
    ratio = np.maximum(stars.peak_e / max(WING_SIGMA * noise, 1e-9), 1.0)
    core = 1.0 / (2.0 * (2.0 ** (1.0 / WING_BETA) - 1.0) ** 0.5)
    reach = core * np.sqrt(np.maximum(ratio ** (1.0 / WING_BETA) - 1.0, 0.0))
    radii = _disc_fwhm(np.arange(DISC_STEPS))
    step = np.minimum(np.searchsorted(radii, reach), DISC_STEPS - 1)
    return np.where(stars.saturated, DISC_STEPS - 1, step)


def _take_out(clear: NDArray[np.bool_], x_px: Floats, y_px: Floats, radius_px: float) -> None:
    """Discs about the stars are no sky, in place."""
    ny, nx = clear.shape
    grid = np.arange(-int(radius_px), int(radius_px) + 1)
    down, right = np.nonzero(grid[:, None] ** 2 + grid[None, :] ** 2 <= radius_px**2)
    y = np.rint(y_px).astype(int)[:, None] + grid[down]
    x = np.rint(x_px).astype(int)[:, None] + grid[right]
    inside = (y >= 0) & (y < ny) & (x >= 0) & (x < nx)
    clear[y[inside], x[inside]] = False


def _cells(image: Image, side: int) -> Floats:
    """Sums over cells; what does not fill a cell at the far edges is left out."""
    rows, columns = image.shape[0] // side, image.shape[1] // side
    cut = image[: rows * side, : columns * side].reshape(rows, side, columns, side)
    sums: Floats = cut.sum(axis=(1, 3), dtype=np.float64)
    return sums


def _smooth(sky: Floats) -> Floats:
    """Median of each cell's surroundings."""
    from scipy.ndimage import median_filter

    known = np.isfinite(sky)
    if not known.any():
        return sky
    filled = np.where(known, sky, np.median(sky[known]))
    smooth: Floats = median_filter(filled, size=min(SMOOTH_CELLS, *sky.shape), mode="nearest")
    return smooth
