"""Robust mean of a stack of images and its noise, measured from the stack itself."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.records import Image

CLIP_SIGMA = 5.0
MAD_TO_SIGMA = 1.4826
"""Ratio of a Gaussian's standard deviation to its median absolute deviation."""


def combine(stack: Image) -> tuple[Image, Image]:
    """Mean of each pixel without outliers, and the variance of one value about it.

    A value is an outlier (a cosmic ray, a star in a twilight flat) when it lies more than 5 σ from its pixel's median;
    σ is the pixel's own scatter or the typical pixel's, whichever is larger, so that few values never clip good ones.

    Parameters
    ----------
    stack
        (n, rows, columns); not-finite values are left out.

    Returns
    -------
    mean, variance
        Mean (NaN where no value is left) and its single-value variance (NaN with fewer than two).
    """
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        finite = np.isfinite(stack)
        mean, variance = _moments(stack, finite)
        typical = np.float32(typical_sigma(variance, len(stack)) or 0.0)
        # Where all values lie within 5 typical sigma of each other none is an outlier: few pixels need slow medians.
        span = np.fmax.reduce(np.where(finite, stack, np.nan)) - np.fmin.reduce(np.where(finite, stack, np.nan))
        suspect = span > CLIP_SIGMA * typical
        if len(stack) > 2 and suspect.any():
            values, known = stack[:, suspect], finite[:, suspect]
            distance = np.abs(values - _median(values, known))
            spread = np.maximum(MAD_TO_SIGMA * _median(distance, known), typical)
            mean[suspect], variance[suspect] = _moments(values, known & ~(distance > CLIP_SIGMA * spread))
        return mean, variance


def _moments(stack: Image, kept: NDArray[np.bool_]) -> tuple[Image, Image]:
    n = kept.sum(axis=0)
    mean = np.where(n > 0, np.where(kept, stack, 0.0).sum(axis=0, dtype=np.float64) / n, np.nan)
    square = np.where(kept, (stack - mean) ** 2, 0.0).sum(axis=0, dtype=np.float64)
    return mean.astype(np.float32), np.where(n > 1, square / (n - 1), np.nan).astype(np.float32)


def _median(values: Image, finite: NDArray[np.bool_]) -> Image:
    if finite.all():
        return np.asarray(np.median(values, axis=0))
    blank = ~finite.any(axis=0)
    return np.asarray(
        np.where(blank, np.nan, np.nanmedian(np.where(blank, 0.0, np.where(finite, values, np.nan)), axis=0))
    )


def typical_sigma(variance: Image, n: int) -> float | None:
    """Standard deviation of one value of a typical pixel, from variances of ``n`` values each; None with n < 2.

    The median over pixels is not moved by hot ones; it is brought to the mean of a χ² variance by the median of χ²
    with k degrees of freedom, k (1 - 2/(9k))³ (Wilson & Hilferty 1931).
    """
    known = variance[np.isfinite(variance)]
    if n < 2 or known.size == 0:
        return None
    k = n - 1
    return float(np.sqrt(np.median(known) / (1.0 - 2.0 / (9.0 * k)) ** 3))
