"""What the air takes away: the second order by colour, applied, and the first order, for information.

The zero point of a frame absorbs the first order (k′X) of its own airmass, so k′ is never applied: it is
fitted where the airmasses of a night reach far enough, and shown.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reduce.records import Floats

LEAST_AIRMASS_RANGE = 0.5
"""Below this range k′ and the zero point cannot be told apart (common practice)."""
TYPICAL_FIRST_ORDER: dict[str, float] = {
    "B": 0.30, "V": 0.20, "R": 0.15, "I": 0.08, "g": 0.24, "r": 0.14, "i": 0.09,
}  # fmt: skip
"""k′ in mag per airmass at a low site (common practice); only to say what a clear sky would look like."""


def above_atmosphere(
    mag: Floats | float,
    first_order: float,
    airmass: Floats | float,
    second_order: float,
    colour: Floats | float,
) -> Floats | float:
    """Magnitude without air: ``m0 = m - k′ X - k″ X colour``."""
    return mag - first_order * airmass - second_order * airmass * colour


@dataclass(frozen=True, slots=True)
class Extinction:
    """A Bouguer line: ``zero point = zp0 - k′ X``."""

    first_order: float
    """k′, mag per airmass."""
    first_order_err: float
    zp0_mag: float
    """Zero point above the atmosphere."""


def fit_extinction(airmass: Floats, zp_mag: Floats, zp_err_mag: Floats) -> Extinction | None:
    """Weighted Bouguer line through zero points of one night and band; None when airmasses are too alike.

    The error is scaled by ``sqrt(chi²/dof)`` where that exceeds 1.
    """
    known = np.isfinite(airmass) & np.isfinite(zp_mag) & (zp_err_mag > 0)
    if known.sum() < 2 or np.ptp(airmass[known]) <= LEAST_AIRMASS_RANGE:
        return None
    x, y, weight = airmass[known], zp_mag[known], zp_err_mag[known] ** -2
    x_mean, y_mean = np.average(x, weights=weight), np.average(y, weights=weight)
    spread = float(np.sum(weight * (x - x_mean) ** 2))
    slope = float(np.sum(weight * (x - x_mean) * (y - y_mean))) / spread
    chi2 = float(np.sum(weight * (y - y_mean - slope * (x - x_mean)) ** 2))
    scale = max(1.0, np.sqrt(chi2 / (len(x) - 2))) if len(x) > 2 else 1.0
    return Extinction(-slope, float(spread**-0.5 * scale), float(y_mean - slope * x_mean))
