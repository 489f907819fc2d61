"""Fluxes on zero point 25 as magnitudes, with errors and limits that hold when little light is there."""

from __future__ import annotations

import math

from reduce.records import FLUX_ZERO_POINT

DETECTION_SNR = 3.0
"""Below it a measurement is a limit: flux and error stay, a magnitude is not given."""
MAG_PER_RELATIVE_FLUX = 2.5 / math.log(10)


def magnitude(flux: float, zero_point: float = FLUX_ZERO_POINT) -> float:
    """Magnitude of a positive flux."""
    return zero_point - 2.5 * math.log10(flux)


def magnitude_err(flux: float, flux_err: float) -> float:
    """Symmetric (linear) magnitude error of a positive flux."""
    return MAG_PER_RELATIVE_FLUX * flux_err / flux


def asymmetric_errors(flux: float, flux_err: float) -> tuple[float, float]:
    """Positive magnitude errors (fainter, brighter); fainter is inf when the error exceeds the flux."""
    fainter = 2.5 * math.log10(flux / (flux - flux_err)) if flux > flux_err else math.inf
    return fainter, 2.5 * math.log10((flux + flux_err) / flux)


def limiting_magnitude(flux_err: float, n_sigma: float = DETECTION_SNR, zero_point: float = FLUX_ZERO_POINT) -> float:
    """Magnitude of a star that would be seen at ``n_sigma``."""
    return zero_point - 2.5 * math.log10(n_sigma * flux_err)


def is_detection(flux: float, flux_err: float) -> bool:
    """Whether there is enough light for a magnitude."""
    return flux_err > 0 and flux >= DETECTION_SNR * flux_err
