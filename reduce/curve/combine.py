"""Repeats of one night as one flux."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reduce.records import Floats

LEAST_REPEATS = 3
"""Fewer repeats say too little about their own scatter."""


@dataclass(frozen=True, slots=True)
class Combined:
    """Weighted mean of repeats."""

    flux: float
    flux_err: float
    """The larger of what the errors and, from 3 repeats on, what the scatter of the repeats say."""
    chi2: float
    weight: Floats
    """(n,) sums to 1."""


def combine(flux: Floats, flux_err: Floats) -> Combined:
    """Mean of repeated fluxes (n,) with weights 1/error²; errors must be positive.

    The errors must not follow the noise of their own flux, or low values get high weight: see
    `expected_errors`.
    """
    inverse = flux_err**-2.0
    total = inverse.sum()
    weight: Floats = inverse / total
    mean = float(np.sum(weight * flux))
    chi2 = float(np.sum(inverse * (flux - mean) ** 2))
    n = len(flux)
    scale = max(1.0, np.sqrt(chi2 / (n - 1))) if n >= LEAST_REPEATS else 1.0
    return Combined(mean, float(total**-0.5 * scale), chi2, weight)


def expected_errors(flux: Floats, flux_err: Floats, photons_per_flux: Floats, relative_err: Floats) -> Floats:
    """Errors of repeats as their common mean flux would give them, instead of each its own noisy flux.

    Parameters
    ----------
    flux, flux_err
        (n,) repeats and their stated noise (without ``relative_err``).
    photons_per_flux
        (n,) electrons that a flux of 1 is on each exposure: the star's own photon variance is flux / this.
    relative_err
        (n,) error that is proportional to the flux (scintillation, flat field).
    """
    own = np.maximum(flux, 0.0) / photons_per_flux
    background = np.maximum(flux_err**2 - own, 0.01 * flux_err**2)
    mean = max(float(np.average(flux, weights=background**-1.0)), 0.0)
    for _ in range(3):
        variance = background + mean / photons_per_flux + (relative_err * mean) ** 2
        mean = max(float(np.average(flux, weights=1.0 / variance)), 0.0)
    errors: Floats = np.sqrt(background + mean / photons_per_flux + (relative_err * mean) ** 2)
    return errors
