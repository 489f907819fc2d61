"""The night over the site: dark hours, Moon, and when each target can be observed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np
from numpy.typing import NDArray

from reduce.almanac.airmass import altitudes, pickering
from reduce.almanac.sky import (
    ASTRONOMICAL_DEG,
    CIVIL_DEG,
    NAUTICAL_DEG,
    RISE_SET_DEG,
    Moon,
    moons,
    separation_deg,
    sun_altitudes,
    sun_position,
    twilight,
)
from reduce.records import Floats, Point, Target
from reduce.settings import Planning, Site
from reduce.views import TargetNight

_MJD_ZERO = date(1858, 11, 17).toordinal()
STEP_D = 10.0 / 1440.0
SUN_EXCLUSION_DEG = 45.0
"""No plan points nearer to the Sun (common practice; local rules prevail)."""
TWILIGHTS = (
    ("Sun", RISE_SET_DEG), ("civil", CIVIL_DEG), ("nautical", NAUTICAL_DEG), ("astronomical", ASTRONOMICAL_DEG)
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class NightSky:
    """The Sun on one night at a site; arrays of shape (n,), evenly spaced from sunset to sunrise."""

    night: str
    mjd: Floats
    sun_altitude_deg: Floats

    @property
    def middle(self) -> float:
        """MJD of the middle of the night."""
        return float(self.mjd.mean())


@dataclass(frozen=True, slots=True)
class Track:
    """A target through a night; arrays of shape (n,) at the times of the `NightSky`."""

    altitude_deg: Floats
    airmass: Floats
    """NaN below the horizon."""
    moon: tuple[Moon, ...]
    observable: NDArray[np.bool_]


def night_sky(night: str, site: Site, step_d: float = STEP_D) -> NightSky:
    """The night that begins on the evening of this ISO date at the site; where the Sun does not set, noon to noon."""
    noon = local_noon(night, site)
    mjd = noon + np.arange(0.0, 1.0 + step_d / 2, step_d)
    sun = sun_altitudes(mjd, site)
    down = sun < RISE_SET_DEG
    keep = down if down.any() else np.ones(len(mjd), bool)
    return NightSky(night, mjd[keep], sun[keep])


def local_noon(night: str, site: Site) -> float:
    """MJD (UTC) of the mean noon before a night."""
    east = (site.longitude_deg + 180.0) % 360.0 - 180.0
    return date.fromisoformat(night).toordinal() - _MJD_ZERO + 0.5 - east / 360.0


def twilights(night: str, site: Site) -> tuple[tuple[str, float, float], ...]:
    """Sunset and the ends of the twilights: (name, evening, morning) as MJD; those that do not end are left out."""
    found = [(name, twilight(night, site, sun)) for name, sun in TWILIGHTS]
    return tuple((name, *ends) for name, ends in found if ends is not None)


def next_night(night: str, days: int = 1) -> str:
    """The date ``days`` evenings later."""
    return (date.fromisoformat(night) + timedelta(days=days)).isoformat()


def track(target: Target, sky: NightSky, site: Site, limits: Planning) -> Track:
    """Where the target stands, and when it can be observed within the limits."""
    altitude = altitudes(sky.mjd, target.ra_deg, target.dec_deg, site)
    airmass = np.array([pickering(h) if h > 0 else np.nan for h in altitude.tolist()])
    moon = moons(sky.mjd, target.ra_deg, target.dec_deg, site)
    far = np.array([m.altitude_deg < 0 or m.separation_deg >= limits.moon_separation_deg for m in moon])
    dark = sky.sun_altitude_deg < limits.sun_altitude_deg
    safe = (sky.sun_altitude_deg < ASTRONOMICAL_DEG) | (sun_separation(target, sky.middle) >= SUN_EXCLUSION_DEG)
    high = altitude >= limits.lowest_altitude_deg
    return Track(altitude, airmass, tuple(moon), dark & high & far & safe)


def sun_separation(target: Target, mjd: float) -> float:
    """Angle between a target and the Sun, degrees."""
    return separation_deg(target.ra_deg, target.dec_deg, *sun_position(mjd))


def target_night(
    target: Target, sky: NightSky, site: Site, limits: Planning, points: Sequence[Point], now_mjd: float
) -> TargetNight:
    """The target on this night: when, how high, how far from Moon and Sun, and whether it is due."""
    found = track(target, sky, site, limits)
    seen = np.flatnonzero(found.observable)
    top = int(np.argmax(found.altitude_deg))
    is_due, due = due_sentence(points, now_mjd, limits.cadence_d)
    return TargetNight(
        altitude_deg=tuple(found.altitude_deg.tolist()),
        window=(float(sky.mjd[seen[0]]), float(sky.mjd[seen[-1]])) if len(seen) else None,
        why_not="" if len(seen) else _why_not(found, sky, limits),
        transit_mjd=float(sky.mjd[top]),
        least_airmass=float(found.airmass[seen].min()) if len(seen) else None,
        moon_separation_deg=found.moon[top].separation_deg,
        sun_separation_deg=sun_separation(target, sky.middle),
        due=due,
        is_due=is_due,
    )


def _why_not(found: Track, sky: NightSky, limits: Planning) -> str:
    dark = sky.sun_altitude_deg < limits.sun_altitude_deg
    if not dark.any():
        return f"the Sun does not sink below {limits.sun_altitude_deg:g} degrees"
    highest = float(found.altitude_deg[dark].max())
    if highest < limits.lowest_altitude_deg:
        return f"not above {limits.lowest_altitude_deg:g} degrees while it is dark (at most {highest:.0f})"
    nearest = min(m.separation_deg for m in found.moon)
    if nearest < limits.moon_separation_deg:
        return f"only {nearest:.0f} degrees from the Moon"
    return f"within {SUN_EXCLUSION_DEG:g} degrees of the Sun in twilight"


def due_sentence(points: Sequence[Point], now_mjd: float, cadence_d: float) -> tuple[bool, str]:
    """Whether the last kept point is older than the cadence, and the words for it."""
    times = [point.mjd for point in points if point.state == "kept" and point.mjd <= now_mjd]
    if not times:
        return True, "due: no point yet"
    age = now_mjd - max(times)
    if age >= cadence_d:
        return True, f"due: last point {age:.1f} d ago"
    return False, f"last point {age:.1f} d ago, due in {cadence_d - age:.1f} d"


def safety_cautions(targets: Sequence[tuple[str, TargetNight]]) -> tuple[str, ...]:
    """What a plan warns of, once a session; local rules and licensed practice prevail."""
    near = [
        f"{name} lies {night.sun_separation_deg:.0f}° from the Sun: no slew to it by day or in twilight."
        for name, night in targets
        if night.sun_separation_deg < SUN_EXCLUSION_DEG
    ]
    return (
        *near,
        "Local rules and licensed practice prevail. Nobody near mount or roof before they move; a limit in software is "
        "no safety device.",
    )
