"""The best hour of a night for each band of a target, and what an exposure would give there."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from reduce.plan.exposure import LEAST_S, Conditions, TelescopeNoise
from reduce.plan.moonlight import moonlight_nl
from reduce.plan.tonight import NightSky, Track
from reduce.settings import Planning

WANTED_SNR = (20.0, 40.0, 80.0)
"""Signal-to-noise that exposures are offered for."""
LONGEST_TOTAL_S = 1800.0
"""Of all frames of one band and night."""


@dataclass(frozen=True, slots=True)
class Hours:
    """When a target can be observed on one night: times and what is met at each."""

    night: str
    mjd: tuple[float, ...]
    conditions: tuple[Conditions, ...]


@dataclass(frozen=True, slots=True)
class Option:
    """Frames of one band at one time."""

    n: int
    exposure_s: float
    snr: float

    def seconds(self, cost: Planning) -> float:
        """Open shutter and read-out."""
        return self.n * (self.exposure_s + cost.readout_s)

    @property
    def variance(self) -> float:
        """Of the magnitude, mag², without what the frames of a night share."""
        return (1.0857 / self.snr) ** 2


def hours(sky: NightSky, found: Track, from_mjd: float = -math.inf) -> Hours:
    """The times of a night, from a moment on, at which the target can be observed."""
    rows = [k for k in np.flatnonzero(found.observable).tolist() if sky.mjd[k] >= from_mjd]
    met = []
    for k in rows:
        above = found.moon[k]
        phase = math.degrees(math.acos(min(1.0, max(-1.0, 2.0 * above.illumination - 1.0))))
        altitude = float(found.altitude_deg[k])
        light = moonlight_nl(phase, above.separation_deg, above.altitude_deg, altitude)
        met.append(Conditions(float(found.airmass[k]), altitude, light))
    return Hours(sky.night, tuple(float(sky.mjd[k]) for k in rows), tuple(met))


def best_hour(noise: TelescopeNoise, band: str, mag: float, when: Hours) -> tuple[float, Conditions] | None:
    """Time and conditions with the most signal-to-noise for the usual exposure; None when there is no time."""
    if not when.mjd:
        return None
    usual = noise.bands[band].usual_exposure_s
    values = [noise.snr(band, mag, usual, met) for met in when.conditions]
    k = int(np.argmax(values))
    return when.mjd[k], when.conditions[k]


def options(
    noise: TelescopeNoise, band: str, mag: float, met: Conditions, cost: Planning, wanted: Sequence[float] = WANTED_SNR
) -> tuple[Option, ...]:
    """Ways to expose, shortest first; what would take too long or saturate in the shortest frame is left out."""
    found = []
    for snr in wanted:
        total = max(noise.exposure(band, mag, snr, met), LEAST_S)
        if total > LONGEST_TOTAL_S or noise.longest_unsaturated(band, mag, met) < LEAST_S:
            continue
        n, exposure_s = noise.split(band, mag, total, met, cost.longest_exposure_s)
        exposure_s = rounded(exposure_s)
        found.append(Option(n, exposure_s, noise.snr(band, mag, exposure_s, met, n)))
    return tuple(found)


def saturation_warnings(noise: TelescopeNoise, mags: Mapping[str, float], met: Conditions) -> tuple[str, ...]:
    """One sentence for each band whose usual exposure would bring the target (of these magnitudes) near saturation."""
    found = []
    for band, mag in mags.items():
        usual, longest = noise.bands[band].usual_exposure_s, noise.longest_unsaturated(band, mag, met)
        if usual > longest:
            found.append(f"{band}: the usual {usual:.0f} s would bring it near saturation, keep below {longest:.0f} s.")
    return tuple(found)


def rounded(seconds: float) -> float:
    """An exposure as an observer would set it, never shorter than asked."""
    step = 1.0 if seconds < 20 else 5.0 if seconds < 120 else 10.0
    return step * math.ceil(seconds / step - 1e-9)
