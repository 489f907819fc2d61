"""Which frames are taken, when, and under what name."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import time
from typing import Literal

from demo_frames.scenario import REWRITTEN, Fault, Scenario, mjd_of

REPEATS = 3
OVERHEAD_S = 25.0
FLATS_AT, DARKS_AT = time(18, 50), time(19, 30)
"""UTC, evening twilight and after it."""
DARKS_EACH, FLATS_EACH = 5, 5
FLAT_EXPOSURE_S = 4.0
SECONDS_PER_DAY = 86400.0


@dataclass(frozen=True, slots=True)
class Exposure:
    """One frame to be taken; ``band`` is None for bias and dark frames."""

    kind: Literal["light", "bias", "dark", "flat"]
    night: int
    number: int
    """Within the night, from 1."""
    band: str | None
    start_mjd: float
    exposure_s: float
    fault: Fault | None = None

    @property
    def filter_in_beam(self) -> str:
        """What the light goes through; the header names ``band``."""
        return (self.fault and self.fault.seen_through) or self.band or ""

    @property
    def mjd_mid(self) -> float:
        """Mid-exposure, MJD UTC."""
        return self.start_mjd + 0.5 * self.exposure_s / SECONDS_PER_DAY


def _calibration(scenario: Scenario, number: int) -> list[Exposure]:
    night = scenario.nights[number]
    wanted: list[tuple[Literal["bias", "dark", "flat"], str | None, float]] = []
    wanted += [("flat", band, FLAT_EXPOSURE_S) for band in night.flats for _ in range(FLATS_EACH)]
    wanted += [("bias", None, 0.0)] * night.bias
    wanted += [("dark", None, exposure_s) for exposure_s in night.darks for _ in range(DARKS_EACH)]
    clock = {"flat": mjd_of(night.evening, FLATS_AT), "dark": mjd_of(night.evening, DARKS_AT)}
    exposures = []
    for count, (kind, band, exposure_s) in enumerate(wanted, start=1):
        line = "flat" if kind == "flat" else "dark"
        exposures.append(Exposure(kind, number, count, band, clock[line], exposure_s))
        clock[line] += (exposure_s + OVERHEAD_S) / SECONDS_PER_DAY
    return exposures


def _lights(scenario: Scenario, number: int, first: int) -> list[Exposure]:
    night = scenario.nights[number]
    faults = [fault for fault in scenario.faults if fault.night == number]
    rewritten = {fault.band: fault for fault in faults if fault.name in REWRITTEN}
    wanted: list[tuple[str, Fault | None]] = []
    for band in scenario.bands:
        wanted.append((band, rewritten.get(band)))
        wanted += [(band, None)] * (REPEATS - 1)
    wanted += [(fault.band, fault) for fault in faults if fault.name not in REWRITTEN]
    start_mjd, exposures = night.start_mjd, []
    for count, (band, fault) in enumerate(wanted, start=first):
        exposure_s = (fault and fault.exposure_s) or scenario.bands[band].exposure_s
        exposures.append(Exposure("light", number, count, band, start_mjd, exposure_s, fault))
        start_mjd += (exposure_s + OVERHEAD_S) / SECONDS_PER_DAY
    return exposures


def all_exposures(scenario: Scenario) -> list[Exposure]:
    """Every frame of the campaign in order of night and number."""
    exposures: list[Exposure] = []
    for number in range(len(scenario.nights)):
        calibration = _calibration(scenario, number)
        exposures += calibration + _lights(scenario, number, len(calibration) + 1)
    return exposures


def frame_path(scenario: Scenario, exposure: Exposure) -> str:
    """Path under ``frames``; the file name alone is unique too."""
    evening = scenario.nights[exposure.night].evening
    what = exposure.band if exposure.kind == "light" else f"{exposure.kind}{exposure.band or ''}"
    suffix = ".fits.fz" if exposure.fault and exposure.fault.name == "compressed" else ".fits"
    return f"{evening.isoformat()}/{evening:%Y%m%d}-{exposure.number:03d}-{what}{suffix}"
