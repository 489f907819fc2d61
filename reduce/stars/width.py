"""Widths of star images."""

from __future__ import annotations

import math

import numpy as np

from reduce.records import Detections

FWHM_PER_SIGMA = 2.0 * math.sqrt(2.0 * math.log(2.0))
BRIGHTEST = 60


def gaussian_fwhm(sigma: float) -> float:
    """FWHM of a Gaussian of standard deviation ``sigma``."""
    return FWHM_PER_SIGMA * sigma


def moffat_fwhm(alpha: float, beta: float) -> float:
    """FWHM of a Moffat profile ``[1 + (r/alpha)²]^-beta`` (Moffat 1969, A&A 3, 455)."""
    return 2.0 * alpha * math.sqrt(2.0 ** (1.0 / beta) - 1.0)


def moffat_enclosed(radius: float, alpha: float, beta: float) -> float:
    """Fraction of a Moffat profile's light within ``radius``; ``beta`` > 1."""
    return float(1.0 - (1.0 + (radius / alpha) ** 2) ** (1.0 - beta))


def frame_fwhm(detections: Detections) -> float:
    """FWHM of a frame in pixels: median of its brightest unsaturated stars after one clip; NaN without any."""
    fwhm = detections.fwhm_px[~detections.saturated][:BRIGHTEST]
    fwhm = fwhm[np.isfinite(fwhm)]
    if len(fwhm) == 0:
        return float("nan")
    middle = np.median(fwhm)
    scatter = max(1.4826 * float(np.median(np.abs(fwhm - middle))), 0.02 * float(middle))
    return float(np.median(fwhm[np.abs(fwhm - middle) <= 3.0 * scatter]))
