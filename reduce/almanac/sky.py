"""Sun and Moon in the sky of a site: altitudes, separation, illumination, twilight.

Positions from ERFA's built-in theories (Earth 2000, Moon 1998), UT1 taken as UTC, no refraction, no aberration of the
Sun: good to 0.01 degrees, with nothing to download.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass
from datetime import date
from typing import Any

import numpy as np

from reduce.almanac.times import MJD_ZERO_JD, SECONDS_PER_DAY, tt_minus_utc_s
from reduce.records import Floats
from reduce.settings import Site

CIVIL_DEG, NAUTICAL_DEG, ASTRONOMICAL_DEG = -6.0, -12.0, -18.0
RISE_SET_DEG = -0.833
"""Upper limb on the horizon, with refraction (common practice)."""
STEP_DAYS = 10.0 / 1440.0
_ORDINAL_MINUS_MJD = 678576


@dataclass(frozen=True, slots=True)
class Moon:
    """The Moon as one site sees it."""

    altitude_deg: float
    separation_deg: float
    """From the star asked for."""
    illumination: float
    """Lit fraction of the disc, 0…1."""


def sun_altitude(mjd: float, site: Site) -> float:
    """Altitude of the Sun's centre at a time in UTC, degrees, without refraction."""
    return float(sun_altitudes(np.array([mjd]), site)[0])


def sun_altitudes(mjd: Floats, site: Site) -> Floats:
    """`sun_altitude` at many times, (n,)."""
    return _altitudes(_sun(mjd), mjd, site)


def sun_position(mjd: float) -> tuple[float, float]:
    """Geocentric right ascension and declination of the Sun, ICRS, degrees."""
    return _direction(_sun(np.array([mjd]))[0])


def moon(mjd: float, ra_deg: float, dec_deg: float, site: Site) -> Moon:
    """The Moon at a time in UTC, seen from the site, with its distance from a star (ICRS)."""
    return moons(np.array([mjd]), ra_deg, dec_deg, site)[0]


def moons(mjd: Floats, ra_deg: float, dec_deg: float, site: Site) -> list[Moon]:
    """`moon` at many times."""
    from_site = _moon(mjd) - _observer(mjd, site)
    return [
        Moon(float(altitude), separation_deg(ra_deg, dec_deg, *_direction(where)), moon_phase(float(when))[1])
        for where, altitude, when in zip(from_site, _altitudes(from_site, mjd, site), mjd, strict=True)
    ]


def moon_phase(mjd: float) -> tuple[float, float]:
    """Phase angle (degrees, 0 at full Moon) and lit fraction, seen from the Earth's centre (Meeus, ch. 48)."""
    to_moon, to_sun = _moon(np.array([mjd]))[0], _sun(np.array([mjd]))[0]
    back, sunward = -to_moon, to_sun - to_moon
    phase = math.atan2(float(np.linalg.norm(np.cross(back, sunward))), float(back @ sunward))
    return math.degrees(phase), (1.0 + math.cos(phase)) / 2.0


def moon_position(mjd: float) -> tuple[float, float]:
    """Geocentric right ascension and declination of the Moon, ICRS, degrees."""
    return _direction(_moon(np.array([mjd]))[0])


def separation_deg(ra1_deg: float, dec1_deg: float, ra2_deg: float, dec2_deg: float) -> float:
    """Angle between two directions, good at any distance (Vincenty's formula)."""
    a, d1, d2 = (math.radians(angle) for angle in (ra2_deg - ra1_deg, dec1_deg, dec2_deg))
    across = math.cos(d2) * math.sin(a)
    along = math.cos(d1) * math.sin(d2) - math.sin(d1) * math.cos(d2) * math.cos(a)
    toward = math.sin(d1) * math.sin(d2) + math.cos(d1) * math.cos(d2) * math.cos(a)
    return math.degrees(math.atan2(math.hypot(across, along), toward))


def twilight(night: str, site: Site, sun_deg: float = ASTRONOMICAL_DEG) -> tuple[float, float] | None:
    """MJD (UTC) at which the Sun sinks below an altitude and rises above it again.

    Parameters
    ----------
    night
        ISO date of the evening at the site, as `times.night_of` names it.

    Returns
    -------
    dusk, dawn
        None when the Sun stays above; the noons before and after when it stays below.
    """
    longitude = (site.longitude_deg + 180.0) % 360.0 - 180.0
    noon = date.fromisoformat(night).toordinal() - _ORDINAL_MINUS_MJD + 0.5 - longitude / 360.0
    when = noon + np.arange(0.0, 1.0 + STEP_DAYS / 2, STEP_DAYS)
    above = _altitudes(_sun(when), when, site) - sun_deg
    dark = np.flatnonzero(above < 0.0)
    if len(dark) == 0:
        return None
    first, last = int(dark[0]), int(dark[-1])
    dusk = float(when[0]) if first == 0 else _crossing(float(when[first - 1]), float(when[first]), site, sun_deg)
    dawn = (
        float(when[-1]) if last == len(when) - 1 else _crossing(float(when[last]), float(when[last + 1]), site, sun_deg)
    )
    return dusk, dawn


def _crossing(before: float, after: float, site: Site, sun_deg: float) -> float:
    from scipy.optimize import brentq

    return float(brentq(lambda mjd: sun_altitude(mjd, site) - sun_deg, before, after, xtol=1e-6))


def _tt(mjd: Floats) -> tuple[float, Floats]:
    """TT as a two-part Julian date."""
    return MJD_ZERO_JD, mjd + tt_minus_utc_s(mjd) / SECONDS_PER_DAY


def _sun(mjd: Floats) -> Floats:
    """(n, 3) vectors from the Earth's centre to the Sun, ICRS axes, au."""
    import erfa

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", erfa.ErfaWarning)
        around_sun, _ = erfa.epv00(*_tt(mjd))
    return -np.asarray(around_sun["p"], dtype=float)


def _moon(mjd: Floats) -> Floats:
    """(n, 3) vectors from the Earth's centre to the Moon, ICRS axes, au."""
    import erfa

    return np.asarray(erfa.moon98(*_tt(mjd))["p"], dtype=float)


def _to_earth(mjd: Floats) -> Any:
    """(n, 3, 3) rotations from celestial to terrestrial axes."""
    import erfa

    return erfa.c2t06a(*_tt(mjd), MJD_ZERO_JD, mjd, 0.0, 0.0)


def _observer(mjd: Floats, site: Site) -> Floats:
    """(n, 3) vectors from the Earth's centre to the site, celestial axes, au."""
    import erfa

    on_earth = erfa.gd2gc(1, math.radians(site.longitude_deg), math.radians(site.latitude_deg), site.height_m)
    return np.asarray(np.einsum("nji,j->ni", _to_earth(mjd), on_earth) / erfa.DAU, dtype=float)


def _altitudes(vectors: Floats, mjd: Floats, site: Site) -> Floats:
    """(n,) altitudes of directions given in celestial axes, degrees."""
    longitude, latitude = math.radians(site.longitude_deg), math.radians(site.latitude_deg)
    up = np.array([
        math.cos(latitude) * math.cos(longitude), math.cos(latitude) * math.sin(longitude), math.sin(latitude)
    ])  # fmt: skip
    on_earth = np.einsum("nij,nj->ni", _to_earth(mjd), vectors)
    sine = on_earth @ up / np.linalg.norm(on_earth, axis=1)
    return np.asarray(np.degrees(np.arcsin(np.clip(sine, -1.0, 1.0))), dtype=float)


def _direction(vector: Floats) -> tuple[float, float]:
    x, y, z = (float(part) for part in vector)
    return math.degrees(math.atan2(y, x)) % 360.0, math.degrees(math.atan2(z, math.hypot(x, y)))
