"""Centroids with a Gaussian window, for many stars together."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats, Image
from reduce.stars.stamps import cut_out, offsets_of
from reduce.stars.width import FWHM_PER_SIGMA

ROUNDS = 12
LARGEST_MOVE_FWHM = 1.0
WINDOW_PER_IMAGE = 1.5
"""Variance of the window over the image's. For faint stars 1 is best, for bright ones infinity; 1.5 costs 4 % and 19 %
of the error."""
LEAST_WINDOW_PX2 = 1.5
"""A narrower window would be undersampled."""


def centroid_error(fwhm_px: float, snr: float) -> float:
    """Limit of a centroid's error on each axis for a Gaussian image without background: FWHM / (2.355 S/N)."""
    return fwhm_px / (FWHM_PER_SIGMA * snr)


def centroid(
    data_e: Image, x_px: Floats, y_px: Floats, fwhm_px: float
) -> tuple[Floats, Floats, Floats, NDArray[np.bool_]]:
    """Windowed centroids about first positions.

    Parameters
    ----------
    data_e
        (ny, nx) electrons, with sky.
    x_px, y_px
        (n,) first positions, good to a pixel or two.

    Returns
    -------
    x, y, error, good
        Each (n,); where ``good`` is False the first position is returned. The error, per axis, is from the
        photons in the window and the scatter of the sky about the star.
    """
    n = len(x_px)
    if n == 0 or not math.isfinite(fwhm_px):
        return np.array(x_px, float), np.array(y_px, float), np.full(n, np.nan), np.zeros(n, bool)
    # Variance of the image on a pixel grid, of the window, and of the product of two Gaussians.
    image = (fwhm_px / FWHM_PER_SIGMA) ** 2 + 1 / 12
    window = max(WINDOW_PER_IMAGE * image, LEAST_WINDOW_PX2)
    product = image * window / (image + window)
    half = math.ceil(4 * math.sqrt(image)) + 1
    cuts = cut_out(data_e, x_px, y_px, half, np.nan).astype(float)
    edge = _edge(cuts)
    known = np.isfinite(edge).any(axis=1)
    edge[~known] = 0.0
    sky = np.nanmedian(edge, axis=1)
    scatter = 1.4826 * np.nanmedian(np.abs(edge - sky[:, None]), axis=1)
    cuts = np.nan_to_num(cuts - sky[:, None, None])
    dx0, dy0 = offsets_of(x_px, y_px, half)
    x, y = np.zeros(n), np.zeros(n)
    for _ in range(ROUNDS):
        dx, dy = dx0 - x[:, None, None], dy0 - y[:, None, None]
        weight = np.exp(-(dx**2 + dy**2) / (2 * window))
        light = cuts * weight
        total = light.sum(axis=(1, 2))
        safe = np.where(total > 0, total, np.inf)
        # The window holds the measured offset back to product / image of the true one.
        x = x + image / product * (light * dx).sum(axis=(1, 2)) / safe
        y = y + image / product * (light * dy).sum(axis=(1, 2)) / safe
    # The centroid solves sum(light · d) = 0: its error is the noise of that sum over the slope of that sum.
    square = (dx**2 + dy**2) / 2
    slope = total - (light * square).sum(axis=(1, 2)) / window
    noise2 = ((cuts + scatter[:, None, None] ** 2) * weight**2 * square).sum(axis=(1, 2))
    good = known & (total > 0) & (slope > 0) & (noise2 > 0)
    good &= np.hypot(x, y) < LARGEST_MOVE_FWHM * max(fwhm_px, 1.5)
    error = np.where(good, np.sqrt(np.where(good, noise2, 1.0)) / np.where(good, slope, 1.0), np.nan)
    return np.where(good, x_px + x, x_px), np.where(good, y_px + y, y_px), error, good


def _edge(cuts: Floats) -> Floats:
    """(n, m) pixels on the rim of the cut-outs."""
    return np.concatenate([cuts[:, 0, :], cuts[:, -1, :], cuts[:, 1:-1, 0], cuts[:, 1:-1, -1]], axis=1)
