"""From the camera's own system to the standard one: ``m = natural + (T - k″ X) colour``.

``natural = -2.5 log10(e-/s) + zero point``; T is the camera's colour term in this band, fixed for all its
frames, and k″ the second order of extinction. The colour is the *standard* one of `records.COLOUR_OF_BAND`.
"""

from __future__ import annotations

import numpy as np

from reduce.records import COLOUR_OF_BAND, Floats, Sequence

LEAST_COLOUR_RANGE = 0.4
"""mag; a smaller range gives no colour term (common practice)."""
LEAST_STARS = 6
ADOPTED_TERM_ERR = 0.05
"""Error of a colour term that was not fitted (common practice: most filters are closer than this)."""
UNKNOWN_COLOUR_ERR = 0.5
"""mag; how far the colour of a target whose colour was not measured may be from the comparison stars'."""


def catalogue_colour(sequence: Sequence, band: str) -> Floats:
    """(n,) colour of every comparison star that the term of ``band`` multiplies; NaN where unknown."""
    blue, red = COLOUR_OF_BAND[band]
    if blue not in sequence.mag or red not in sequence.mag:
        return np.full(len(sequence), np.nan)
    return np.asarray(sequence.mag[blue] - sequence.mag[red], dtype=float)


def can_fit_term(colour: Floats) -> bool:
    """Whether stars of these colours (NaN ignored) are enough for a colour term."""
    known = colour[np.isfinite(colour)]
    return len(known) >= LEAST_STARS and float(np.ptp(known)) > LEAST_COLOUR_RANGE


def colour_coefficient(term: float, second_order: float, airmass: float | None) -> float:
    """``T - k″ X``, which multiplies the colour; without an airmass the second order is left out."""
    return term - second_order * (airmass if airmass is not None else 0.0)


def to_standard(natural_mag: float, coefficient: float, colour: float) -> float:
    """Standard magnitude of a star of known standard colour."""
    return natural_mag + coefficient * colour


def solve_colour(blue_mag: float, red_mag: float, blue_coefficient: float, red_coefficient: float) -> float:
    """Standard colour from two natural magnitudes, when both bands are transformed with this same colour.

    Exact solution of ``c = (blue + blue_coefficient c) - (red + red_coefficient c)``. With a coefficient of 0
    the magnitude is taken as standard already. It is Hardie's (1962) colour equation: with coefficients that
    hold only ``-k″X`` the result is the colour above the atmosphere.
    """
    return (blue_mag - red_mag) / (1.0 - blue_coefficient + red_coefficient)
