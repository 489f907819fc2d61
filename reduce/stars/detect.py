"""Finding stars: a matched filter, local maxima above the noise, and weighted moments of each."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Detections, Floats, Image, Mask, PixelFlag
from reduce.stars.stamps import cut_out, offsets_of
from reduce.stars.width import BRIGHTEST, FWHM_PER_SIGMA, frame_fwhm

THRESHOLD_SIGMA = 5.0
FIRST_FWHM_PX = 3.5
"""Of the first pass, which only measures the frame's own width."""
SURROUNDINGS = 3.0
"""Width of the kernel's negative part over that of the positive part, which is the star's."""
MESH_PX = 64
SMALLEST_WIDTH = 0.6
"""A detection narrower than this times the frame's FWHM is a hot pixel or a cosmic ray."""
LARGEST_FWHM_PX = 40.0
MOMENT_ROUNDS = 10
WEIGHT_EXTRA_PX2 = 0.5
WINGS_TO_WIDTH = 3.2
"""How much narrower than its moments say the half-maximum of a winged image is, per excess of light in a window twice
as wide: within 1.2 % for Moffat profiles of beta 2 to infinity, by their integrals. Pixels and the weight's extra
width dilute the excess by about 1 + WINGS_DILUTION_PX2 / variance."""
WINGS_DILUTION_PX2 = 0.7
"""Measured on simulated Gaussian, Moffat and Kolmogorov stars of 1.5 to 8 px."""
NARROWEST_OF_MOMENTS = 0.8
LEAST_FWHM_PX = 0.5
PIXEL_FWHM2_PX2 = FWHM_PER_SIGMA**2 / 12
"""What a pixel adds to the squared width: the variance of a square of side 1 is 1/12."""


def detect(data_e: Image, mask: Mask, *, saturation_e: float, max_stars: int = 500) -> Detections:
    """Stars of one frame, brightest first.

    Parameters
    ----------
    data_e
        (ny, nx) electrons with sky.
    mask
        (ny, nx) PixelFlag bits; bad pixels take no part.
    saturation_e
        Level (sky included) from which a pixel counts as saturated even when the mask does not say so.
    max_stars
        At most this many are returned.
    """
    bad = (mask & (PixelFlag.BAD | PixelFlag.NOT_FINITE)) != 0
    bad |= ~np.isfinite(data_e)
    if bad.all() or min(data_e.shape) < 16:
        return _nothing()
    level, sigma = background(data_e, bad)
    if not sigma > 0:
        return _nothing()
    clean = np.where(bad, 0.0, data_e - level).astype(np.float32)
    saturated = ((mask & PixelFlag.SATURATED) != 0) | (np.where(bad, 0.0, data_e) >= saturation_e)
    # Where a galaxy is bright its own photons add to the scatter of the sky.
    noise = np.sqrt(sigma**2 + np.maximum(level - np.median(level), 0.0))
    first = _find(clean, noise, FIRST_FWHM_PX, 150)
    shapes = _moments(clean, *first[:2], FIRST_FWHM_PX)
    usual = _usual_width(shapes.fwhm, saturated, *first[:2])
    x, y, _ = _find(clean, noise, usual, 2 * max_stars)
    shape = _moments(clean, x, y, usual)
    keep = np.isfinite(shape.fwhm) & (shape.fwhm > SMALLEST_WIDTH * usual) & (shape.fwhm < LARGEST_FWHM_PX)
    x, y, shape = x[keep], y[keep], shape.take(keep)
    half = max(2, math.ceil(1.5 * usual))
    dx, dy = offsets_of(x, y, half)
    near = dx**2 + dy**2 <= (1.5 * usual) ** 2
    cuts = cut_out(clean, x, y, half, 0.0)
    flux = np.where(near, cuts, 0.0).sum(axis=(1, 2)).astype(float)
    peak = np.where(near, cuts, -np.inf).max(axis=(1, 2)).astype(float) if len(x) else np.zeros(0)
    full: NDArray[np.bool_] = (near & cut_out(saturated, x, y, half, False)).any(axis=(1, 2))
    order = np.lexsort((y, x, -flux))
    order = order[flux[order] > 0][:max_stars]
    fwhm = _half_maximum_width(shape, full)
    return Detections(
        x[order], y[order], flux[order], peak[order], fwhm[order], shape.elongation[order], shape.angle[order],
        full[order],
    )  # fmt: skip


def _nothing() -> Detections:
    empty = np.zeros(0)
    return Detections(empty, empty, empty, empty, empty, empty, empty, np.zeros(0, bool))


def background(data_e: Image, bad: NDArray[np.bool_]) -> tuple[Image, float]:
    """Smooth background (ny, nx) from clipped medians of a mesh, and the scatter of one pixel about it."""
    from scipy.ndimage import map_coordinates, median_filter

    ny, nx = data_e.shape
    rows, columns = max(1, ny // MESH_PX), max(1, nx // MESH_PX)
    y_edges, x_edges = np.linspace(0, ny, rows + 1).astype(int), np.linspace(0, nx, columns + 1).astype(int)
    level, scatter = np.full((rows, columns), np.nan), np.full((rows, columns), np.nan)
    for j in range(rows):
        for i in range(columns):
            at = np.s_[y_edges[j] : y_edges[j + 1], x_edges[i] : x_edges[i + 1]]
            values = data_e[at][~bad[at]]
            if len(values) < 20:
                continue
            middle = np.median(values)
            spread = 1.4826 * np.median(np.abs(values - middle))
            for _ in range(2):
                values = values[np.abs(values - middle) <= 3.0 * spread]
                middle = np.median(values)
                spread = 1.4826 * np.median(np.abs(values - middle))
            level[j, i], scatter[j, i] = middle, spread
    if not np.isfinite(level).any():
        return np.zeros_like(data_e), float("nan")
    level = np.where(np.isfinite(level), level, np.nanmedian(level))
    level = median_filter(level, size=3, mode="nearest")
    y_at = np.interp(np.arange(ny), (y_edges[:-1] + y_edges[1:] - 1) / 2, np.arange(rows))
    x_at = np.interp(np.arange(nx), (x_edges[:-1] + x_edges[1:] - 1) / 2, np.arange(columns))
    smooth = map_coordinates(level, np.meshgrid(y_at, x_at, indexing="ij"), order=1, mode="nearest")
    return smooth.astype(np.float32), float(np.nanmedian(scatter))


def _find(clean: Image, noise: Image, fwhm_px: float, most: int) -> tuple[Floats, Floats, Floats]:
    """Positions (to a third of a pixel) and heights of local maxima of the filtered image, highest first."""
    from scipy.ndimage import gaussian_filter, maximum_filter

    width = fwhm_px / FWHM_PER_SIGMA
    # Beyond the edge there is nothing: repeated edge pixels would repeat their noise and pass for stars.
    smooth = gaussian_filter(clean, width, mode="constant", truncate=3.0)
    # Less a wider one, so that the slope of a galaxy is nothing.
    smooth -= gaussian_filter(clean, SURROUNDINGS * width, mode="constant", truncate=3.0)
    # A Gaussian filter keeps 1 / (2 σ √π) of white noise; of the difference, the integral of its square.
    kept = math.sqrt(1.0 + 1.0 / SURROUNDINGS**2 - 4.0 / (1.0 + SURROUNDINGS**2))
    limit = THRESHOLD_SIGMA * noise * kept / (2.0 * width * math.sqrt(math.pi))
    reach = max(3, 2 * round(fwhm_px / 2) + 1)
    top = (smooth > limit) & (smooth == maximum_filter(smooth, size=reach, mode="nearest"))
    y, x = np.nonzero(top)
    height = smooth[y, x].astype(float)
    order = np.lexsort((y, x, -height))[:most]
    return x[order].astype(float), y[order].astype(float), height[order]


@dataclass(frozen=True, slots=True)
class _Shapes:
    """Adaptive second moments of many stars, arrays of shape (n,); NaN where the iteration found no star."""

    fwhm: Floats
    """Of the Gaussian that stands for the image, pixel included."""
    elongation: Floats
    angle: Floats
    wings: Floats
    """Light in a window twice as wide, against a Gaussian's; 0 for a Gaussian."""

    def take(self, keep: NDArray[np.bool_]) -> _Shapes:
        return _Shapes(self.fwhm[keep], self.elongation[keep], self.angle[keep], self.wings[keep])


def _moments(clean: Image, x: Floats, y: Floats, fwhm_px: float) -> _Shapes:
    """Adaptive second moments: an elliptical Gaussian weight that follows the shape it measures.

    (Bernstein & Jarvis 2002, AJ 123, 583, §3; here the weight is wider by WEIGHT_EXTRA_PX2, so that it stays well
    sampled on images narrower than a pixel or two.) ``x`` and ``y`` are moved to the weighted centres in place.
    """
    n = len(x)
    if n == 0:
        return _Shapes(np.zeros(0), np.zeros(0), np.zeros(0), np.zeros(0))
    half = math.ceil(2.0 * fwhm_px) + 2
    cuts = cut_out(clean, x, y, half, 0.0).astype(float)
    cx, cy = np.zeros(n), np.zeros(n)
    start = (fwhm_px / FWHM_PER_SIGMA) ** 2
    xx, yy, xy = np.full(n, start), np.full(n, start), np.zeros(n)
    alive = np.ones(n, bool)
    for _ in range(MOMENT_ROUNDS):
        wxx, wyy = xx + WEIGHT_EXTRA_PX2, yy + WEIGHT_EXTRA_PX2
        light, dx, dy = _weighted(cuts, cx, cy, wxx, wyy, xy)
        total = light.sum(axis=(1, 2))
        safe = np.where(total > 0, total, np.inf)
        mx, my = (light * dx).sum(axis=(1, 2)) / safe, (light * dy).sum(axis=(1, 2)) / safe
        pxx, pyy = (light * dx**2).sum(axis=(1, 2)) / safe, (light * dy**2).sum(axis=(1, 2)) / safe
        pxy = (light * dx * dy).sum(axis=(1, 2)) / safe
        alive &= (total > 0) & (pxx > 0.01) & (pyy > 0.01) & (pxx * pyy - pxy**2 > 2.5e-4)
        # The covariances of image, weight and their product obey 1/product = 1/image + 1/weight.
        ixx, iyy, ixy = _inverse(*(np.where(alive, p, q) for p, q in ((pxx, 1.0), (pyy, 1.0), (pxy, 0.0))))
        vxx, vyy, vxy = _inverse(wxx, wyy, xy)
        rest = (ixx - vxx) * (iyy - vyy) - (ixy - vxy) ** 2
        alive &= (rest > 0) & (ixx > vxx)
        new_xx, new_yy, new_xy = _inverse(
            *(np.where(alive, p, q) for p, q in ((ixx - vxx, 1.0), (iyy - vyy, 1.0), (ixy - vxy, 0.0)))
        )
        alive &= (new_xx < half**2) & (new_yy < half**2)
        # The mean of the product lies off the weight's centre by product / image of the image's offset.
        ux, uy = ixx * mx + ixy * my, ixy * mx + iyy * my
        step_x, step_y = new_xx * ux + new_xy * uy, new_xy * ux + new_yy * uy
        alive &= (np.abs(cx + step_x) < half) & (np.abs(cy + step_y) < half)
        cx, cy = np.where(alive, cx + step_x, cx), np.where(alive, cy + step_y, cy)
        xx, yy, xy = np.where(alive, new_xx, xx), np.where(alive, new_yy, yy), np.where(alive, new_xy, xy)
    wxx, wyy = xx + WEIGHT_EXTRA_PX2, yy + WEIGHT_EXTRA_PX2
    near = _weighted(cuts, cx, cy, wxx, wyy, xy)[0].sum(axis=(1, 2))
    wide = _weighted(cuts, cx, cy, 4 * wxx, 4 * wyy, 4 * xy)[0].sum(axis=(1, 2))
    near_area = _determinant(xx + wxx, yy + wyy, 2 * xy)
    wide_area = _determinant(xx + 4 * wxx, yy + 4 * wyy, 5 * xy)
    gaussian = 4.0 * np.sqrt(near_area / wide_area)
    x += np.where(alive, cx, 0.0)
    y += np.where(alive, cy, 0.0)
    middle, half_difference = (xx + yy) / 2, np.hypot((xx - yy) / 2, xy)
    major, minor = middle + half_difference, np.maximum(middle - half_difference, 1e-3)
    return _Shapes(
        fwhm=np.where(alive, FWHM_PER_SIGMA * (major * minor) ** 0.25, np.nan),
        elongation=np.sqrt(major / minor),
        angle=np.degrees(0.5 * np.arctan2(2 * xy, xx - yy)) % 180.0,
        wings=np.where(alive & (near > 0), wide / np.where(near > 0, near, 1.0) / gaussian - 1.0, np.nan),
    )


def _weighted(
    cuts: Floats, cx: Floats, cy: Floats, wxx: Floats, wyy: Floats, wxy: Floats
) -> tuple[Floats, Floats, Floats]:
    """Cut-outs times a Gaussian of each star's own covariance, and the offsets from its centre."""
    half = cuts.shape[1] // 2
    grid = np.arange(-half, half + 1, dtype=float)
    dx, dy = grid[None, None, :] - cx[:, None, None], grid[None, :, None] - cy[:, None, None]
    ixx, iyy, ixy = (value[:, None, None] for value in _inverse(wxx, wyy, wxy))
    exponent = ixx * dx**2 + iyy * dy**2 + 2 * ixy * dx * dy
    return cuts * np.exp(-0.5 * np.minimum(exponent, 60.0)), dx, dy


def _determinant(xx: Floats, yy: Floats, xy: Floats) -> Floats:
    return xx * yy - xy**2


def _inverse(xx: Floats, yy: Floats, xy: Floats) -> tuple[Floats, Floats, Floats]:
    """Inverse of symmetric 2 × 2 matrices."""
    determinant = _determinant(xx, yy, xy)
    return yy / determinant, xx / determinant, -xy / determinant


def _half_maximum_width(shape: _Shapes, saturated: NDArray[np.bool_]) -> Floats:
    """FWHM of the profile before the pixel sampled it; the wings are those of the frame's brightest stars."""
    known = np.flatnonzero(~saturated & np.isfinite(shape.wings))[:BRIGHTEST]
    factor = 1.0
    if len(known):
        image_px2 = float(np.median(shape.fwhm[known] / FWHM_PER_SIGMA)) ** 2
        excess = float(np.median(shape.wings[known])) * (1.0 + WINGS_DILUTION_PX2 / image_px2)
        factor = float(np.clip(1.0 - WINGS_TO_WIDTH * excess, NARROWEST_OF_MOMENTS, 1.0))
    return np.sqrt(np.maximum((shape.fwhm * factor) ** 2 - PIXEL_FWHM2_PX2, LEAST_FWHM_PX**2))


def _usual_width(fwhm: Floats, saturated: NDArray[np.bool_], x: Floats, y: Floats) -> float:
    """Width of the frame from the first pass; cosmic rays and hot pixels are fewer or fainter than stars."""
    known = np.isfinite(fwhm)
    if not known.any():
        return FIRST_FWHM_PX
    ny, nx = saturated.shape
    column, row = np.clip(np.rint(x), 0, nx - 1).astype(int), np.clip(np.rint(y), 0, ny - 1).astype(int)
    full = saturated[row, column]
    seen = Detections(x, y, fwhm, fwhm, np.where(fwhm > 1.2, fwhm, np.nan), fwhm, fwhm, full)
    width = frame_fwhm(seen)
    return float(np.clip(width, 1.2, LARGEST_FWHM_PX / 2)) if math.isfinite(width) else FIRST_FWHM_PX
