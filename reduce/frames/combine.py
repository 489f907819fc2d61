"""Robust mean of a stack of images and its noise, measured from the stack itself."""

from __future__ import annotations

import numpy as np

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
    with np.errstate(invalid="ignore", divide="ignore"):
        finite = np.isfinite(stack)
        clean = finite.all()
        values = stack if clean else np.where(finite, stack, np.nan)
        kept = finite
        if len(stack) > 2:
            centre = _median(values, clean)
            distance = np.abs(values - centre)
            spread = MAD_TO_SIGMA * _median(distance, clean)
            typical = np.nanmedian(spread) if np.isfinite(spread).any() else 0.0
            kept = finite & ~(distance > CLIP_SIGMA * np.maximum(spread, typical))
        n = kept.sum(axis=0)
        total = np.where(kept, stack, 0.0).sum(axis=0, dtype=np.float64)
        mean = np.where(n > 0, total / n, np.nan)
        square = np.where(kept, (stack - mean) ** 2, 0.0).sum(axis=0, dtype=np.float64)
        return mean.astype(np.float32), np.where(n > 1, square / (n - 1), np.nan).astype(np.float32)


def _median(values: Image, clean: np.bool_) -> Image:
    if clean:
        return np.asarray(np.median(values, axis=0))
    blank = ~np.isfinite(values).any(axis=0)
    return np.asarray(np.where(blank, np.nan, np.nanmedian(np.where(blank, 0.0, values), axis=0)))


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
