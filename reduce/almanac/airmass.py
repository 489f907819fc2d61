"""Where a star stands above the horizon and through how much air it is seen.

Positions on the horizon come from ERFA (the IAU's standard models) with UT1 taken as UTC: no table of the Earth's
rotation is needed, and none can change a result. That is at most 0.9 s, 0.004 degrees.
"""

from __future__ import annotations

import math
import warnings

import numpy as np

from reduce.almanac.times import MJD_ZERO_JD
from reduce.records import Floats
from reduce.settings import Site

LEAST_HARDIE_ALTITUDE_DEG = 5.0
SEA_LEVEL_HPA, PRESSURE_HEIGHT_M, AIR_TEMPERATURE_C = 1013.25, 8400.0, 10.0
"""Common practice; refraction needs no better: at 10 degrees it changes the airmass by 0.8 %."""


def pickering(apparent_altitude_deg: float) -> float:
    """Airmass for the altitude as seen, good down to the horizon (Pickering 2002, DIO 12, 20)."""
    h = apparent_altitude_deg
    return 1.0 / math.sin(math.radians(h + 244.0 / (165.0 + 47.0 * math.pow(h, 1.1))))


def kasten_young(altitude_deg: float) -> float:
    """Airmass after Kasten & Young (1989, Appl. Opt. 28, 4735); their 0.9997 at the zenith is raised to 1."""
    zenith = 90.0 - altitude_deg
    return max(1.0, 1.0 / (math.cos(math.radians(zenith)) + 0.50572 * math.pow(96.07995 - zenith, -1.6364)))


def hardie(altitude_deg: float) -> float:
    """Airmass after Hardie (1962, Astronomical Techniques, ch. 8) for the altitude without refraction.

    Raises
    ------
    ValueError
        Below 5 degrees, where the polynomial is no longer good.
    """
    if altitude_deg < LEAST_HARDIE_ALTITUDE_DEG:
        raise ValueError(f"Hardie's airmass holds above {LEAST_HARDIE_ALTITUDE_DEG:g} degrees only.")
    s = 1.0 / math.sin(math.radians(altitude_deg)) - 1.0
    return 1.0 + s - 0.0018167 * s - 0.002875 * s**2 - 0.0008083 * s**3


def horizontal(hour_angle_deg: float, dec_deg: float, latitude_deg: float) -> tuple[float, float]:
    """Altitude and azimuth (from north through east), degrees, by spherical trigonometry."""
    h, d, p = (math.radians(angle) for angle in (hour_angle_deg, dec_deg, latitude_deg))
    up = math.sin(p) * math.sin(d) + math.cos(p) * math.cos(d) * math.cos(h)
    north = math.cos(p) * math.sin(d) - math.sin(p) * math.cos(d) * math.cos(h)
    east = -math.cos(d) * math.sin(h)
    altitude = math.atan2(up, math.hypot(north, east))
    return math.degrees(altitude), math.degrees(math.atan2(east, north)) % 360.0


def transit_altitude(dec_deg: float, latitude_deg: float) -> float:
    """Altitude at the upper culmination, degrees."""
    return 90.0 - abs(latitude_deg - dec_deg)


def hour_angle_at(altitude_deg: float, dec_deg: float, latitude_deg: float) -> float | None:
    """Hour angle in sidereal hours at which a star sets below an altitude; None if it never crosses it."""
    h, d, p = (math.radians(angle) for angle in (altitude_deg, dec_deg, latitude_deg))
    below = math.cos(p) * math.cos(d)
    if abs(below) < 1e-12:
        return None
    cosine = (math.sin(h) - math.sin(p) * math.sin(d)) / below
    return math.degrees(math.acos(cosine)) / 15.0 if abs(cosine) <= 1.0 else None


def altitude_azimuth(mjd: float, ra_deg: float, dec_deg: float, site: Site) -> tuple[float, float]:
    """Altitude and azimuth (from north through east) without refraction, degrees.

    Parameters
    ----------
    mjd
        UTC.
    ra_deg, dec_deg
        ICRS.
    """
    return _observed(mjd, ra_deg, dec_deg, site, pressure_hpa=0.0)


def altitudes(mjd: Floats, ra_deg: float, dec_deg: float, site: Site) -> Floats:
    """Altitudes without refraction at many times, (n,) degrees; parameters as `altitude_azimuth`."""
    return np.array([altitude_azimuth(float(when), ra_deg, dec_deg, site)[0] for when in mjd])


def airmass(mjd: float, ra_deg: float, dec_deg: float, site: Site) -> float | None:
    """Airmass after Pickering at the altitude as seen; None below the horizon.

    Parameters
    ----------
    mjd
        UTC, mid-exposure.
    ra_deg, dec_deg
        ICRS.
    """
    altitude, _ = altitude_azimuth(mjd, ra_deg, dec_deg, site)
    if altitude < 0.0:
        return None
    pressure = SEA_LEVEL_HPA * math.exp(-site.height_m / PRESSURE_HEIGHT_M)
    apparent, _ = _observed(mjd, ra_deg, dec_deg, site, pressure)
    return pickering(max(apparent, 0.0))


def _observed(mjd: float, ra_deg: float, dec_deg: float, site: Site, pressure_hpa: float) -> tuple[float, float]:
    import erfa

    with warnings.catch_warnings():
        # Leap seconds of years to come are unknown; they do not matter here.
        warnings.simplefilter("ignore", erfa.ErfaWarning)
        azimuth, zenith, *_ = erfa.atco13(
            math.radians(ra_deg), math.radians(dec_deg), 0.0, 0.0, 0.0, 0.0,
            MJD_ZERO_JD, mjd, 0.0,
            math.radians(site.longitude_deg), math.radians(site.latitude_deg), site.height_m, 0.0, 0.0,
            pressure_hpa, AIR_TEMPERATURE_C, 0.0, 0.55,
        )  # fmt: skip
    return 90.0 - float(np.degrees(zenith)), float(np.degrees(azimuth))
