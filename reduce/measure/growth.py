"""Growth curve of a frame: how much of a star's light each aperture holds."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.noise import MAG_PER_FRACTION
from reduce.records import LADDER_FWHM, Floats

LAST = len(LADDER_FWHM) - 1
LEAST_SNR = 50.0
FEWEST_STARS = 3
MOST_STARS = 40
CLIP_SIGMA = 3.5
STAR_SCATTER_MAG = 0.002
"""Star-to-star scatter of the image profile that noise does not explain; keeps one bright star from ruling."""


def gaussian_enclosed(radius_fwhm: float) -> float:
    """Fraction of a Gaussian image's light within a radius in FWHM."""
    return float(1.0 - 2.0 ** (-4.0 * radius_fwhm**2))


def correction_mag(fraction: float) -> float:
    """Magnitudes to add to what an aperture with this fraction of the light gives: negative."""
    return float(2.5 * np.log10(fraction))


def growth_curve(table: NDArray[Any]) -> tuple[Floats, Floats]:
    """Aperture corrections to the largest FWHM radius and their errors, each of shape (len(LADDER_FWHM),).

    Field stars without any flag there and with a signal-to-noise above 50, the brightest 40, averaged by their noise
    after clipping at 3.5 σ; the error grows with the scatter where that exceeds the noise. NaN with fewer than three
    stars. (Stetson 1990, PASP 102, 932, for the idea.)

    Parameters
    ----------
    table
        STAR_DTYPE rows of one frame.
    """
    stars = table[_fit_for_growth(table)]
    stars = stars[np.argsort(-stars["flux_e"][:, LAST], kind="stable")][:MOST_STARS]
    mag, err = np.full(LAST + 1, np.nan), np.full(LAST + 1, np.nan)
    if len(stars) < FEWEST_STARS:
        return mag, err
    whole, whole_err = stars["flux_e"][:, LAST], stars["flux_err_e"][:, LAST]
    for k in range(LAST):
        part, part_err = stars["flux_e"][:, k], stars["flux_err_e"][:, k]
        # Both hold the same inner photons: only the noise between the radii makes the difference.
        noise = MAG_PER_FRACTION * np.sqrt(np.maximum(whole_err**2 - part_err**2, 0.0)) / whole
        mag[k], err[k] = _clipped_mean(-2.5 * np.log10(whole / part), np.hypot(noise, STAR_SCATTER_MAG))
    mag[LAST], err[LAST] = 0.0, 0.0
    return mag, err


def _fit_for_growth(table: NDArray[Any]) -> NDArray[np.bool_]:
    flux, flux_err = table["flux_e"][:, : LAST + 1], table["flux_err_e"][:, LAST]
    clean = (table["role"] == 0) & (table["flags"][:, LAST] == 0)
    return np.asarray(clean & (flux > 0).all(axis=1) & (flux[:, LAST] > LEAST_SNR * flux_err), dtype=bool)


def _clipped_mean(values: Floats, errors: Floats) -> tuple[float, float]:
    middle = np.median(values)
    spread = 1.4826 * np.median(np.abs(values - middle))
    keep = np.abs(values - middle) <= CLIP_SIGMA * np.maximum(errors, spread)
    values, weight = values[keep], errors[keep] ** -2
    mean = float((weight * values).sum() / weight.sum())
    chi2_dof = float((weight * (values - mean) ** 2).sum() / max(len(values) - 1, 1))
    return mean, float(weight.sum() ** -0.5 * max(1.0, chi2_dof**0.5))
