"""How bright the Moon makes the sky: Krisciunas & Schaefer (1991, PASP 103, 1033)."""

from __future__ import annotations

import math

V_EXTINCTION = 0.172
"""mag per airmass, of their site; the shape of the law hardly depends on it."""
DARK_TO_NANOLAMBERT, PER_MAG = 34.08, 0.92104
LEAST_SEPARATION_DEG = 10.0
"""Nearer to the Moon the law does not hold."""


def sky_airmass(zenith_deg: float) -> float:
    """Path through the layer that scatters and shines (their eq. 3)."""
    return float((1.0 - 0.96 * math.sin(math.radians(zenith_deg)) ** 2) ** -0.5)


def nanolamberts(v_mag_arcsec2: float) -> float:
    """Surface brightness of a V magnitude per square arcsecond (their eq. 1)."""
    return DARK_TO_NANOLAMBERT * math.exp(20.7233 - PER_MAG * v_mag_arcsec2)


def v_mag_arcsec2(brightness_nl: float) -> float:
    """V magnitude per square arcsecond of a surface brightness in nanolamberts."""
    return (20.7233 - math.log(brightness_nl / DARK_TO_NANOLAMBERT)) / PER_MAG


def moonlight_nl(
    phase_deg: float,
    separation_deg: float,
    moon_altitude_deg: float,
    altitude_deg: float,
    extinction: float = V_EXTINCTION,
) -> float:
    """Moonlight in V at a place of the sky, nanolamberts (their eq. 15, 20, 21); 0 with the Moon down.

    Parameters
    ----------
    phase_deg
        0 at full Moon.
    separation_deg
        Between the Moon and that place; held at 10 degrees.
    """
    if moon_altitude_deg <= 0.0:
        return 0.0
    moon = 10.0 ** (-0.4 * (3.84 + 0.026 * abs(phase_deg) + 4e-9 * phase_deg**4))
    rho = max(separation_deg, LEAST_SEPARATION_DEG)
    scattering = 10.0**5.36 * (1.06 + math.cos(math.radians(rho)) ** 2) + 10.0 ** (6.15 - rho / 40.0)
    to_moon, to_place = sky_airmass(90.0 - moon_altitude_deg), sky_airmass(90.0 - altitude_deg)
    dimmed = 10.0 ** (-0.4 * extinction * to_moon)
    return float(scattering * moon * dimmed * (1.0 - 10.0 ** (-0.4 * extinction * to_place)))
