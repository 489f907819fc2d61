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
    sigma = max(fwhm_px, 1.5) / FWHM_PER_SIGMA
    half = math.ceil(4 * sigma) + 1
    cuts = cut_out(data_e, x_px, y_px, half, np.nan).astype(float)
    sky = np.nanmedian(_edge(cuts), axis=1)
    scatter = 1.4826 * np.nanmedian(np.abs(_edge(cuts) - sky[:, None]), axis=1)
    cuts = np.nan_to_num(cuts - sky[:, None, None])
    dx0, dy0 = offsets_of(x_px, y_px, half)
    x, y = np.zeros(n), np.zeros(n)
    total = np.ones(n)
    for _ in range(ROUNDS):
        dx, dy = dx0 - x[:, None, None], dy0 - y[:, None, None]
        light = cuts * np.exp(-(dx**2 + dy**2) / (2 * sigma**2))
        total = light.sum(axis=(1, 2))
        safe = np.where(total > 0, total, np.inf)
        # The window halves the measured offset of a Gaussian image of its own width: twice the step converges.
        x = x + 2.0 * (light * dx).sum(axis=(1, 2)) / safe
        y = y + 2.0 * (light * dy).sum(axis=(1, 2)) / safe
    good = (total > 0) & np.isfinite(sky) & (np.hypot(x, y) < LARGEST_MOVE_FWHM * max(fwhm_px, 1.5))
    # A window of the image's own width keeps half of a Gaussian's light; its noise is that of 4 π σ² pixels.
    flux = 2.0 * np.where(good, total, np.nan)
    noise = np.sqrt(np.maximum(flux, 0) + 4 * np.pi * sigma**2 * scatter**2)
    error = np.where(good, sigma * noise / np.maximum(flux, 1e-9), np.nan)
    return np.where(good, x_px + x, x_px), np.where(good, y_px + y, y_px), error, good


def _edge(cuts: Floats) -> Floats:
    """(n, m) pixels on the rim of the cut-outs."""
    return np.concatenate([cuts[:, 0, :], cuts[:, -1, :], cuts[:, 1:-1, 0], cuts[:, 1:-1, -1]], axis=1)
