"""An invented night for the invented campaign of fake_desk."""

from __future__ import annotations

import math

import numpy as np

from reduce.records import Target
from reduce.views import Advice, Plan, Snapshot, TargetNight, TargetPlan

MIDNIGHT = 63016
START, END = MIDNIGHT - 0.2, MIDNIGHT + 0.16
CAUTION = "Korab b lies 38° from the Sun: no slew to it by day or in twilight."
GENERAL = (
    "Local rules and licensed practice prevail. Nobody near mount or roof before they move; a limit in software is "
    "no safety device."
)


def night_of_target(target: Target, mjd: np.ndarray, place: int) -> TargetNight:
    transit = MIDNIGHT - 0.09 + 0.06 * place
    altitude = 62.0 - 12.0 * place - 1400.0 * (mjd - transit) ** 2
    inside = mjd[(altitude > 30.0) & (mjd > START + 0.05) & (mjd < END - 0.05)]
    up = place < 2
    return TargetNight(
        altitude_deg=tuple(altitude.tolist()),
        window=(float(inside[0]), float(inside[-1])) if up else None,
        why_not="" if up else "within 45 degrees of the Sun in twilight",
        transit_mjd=transit,
        least_airmass=1.13 + 0.2 * place if up else None,
        moon_separation_deg=74.0 - 20.0 * place,
        sun_separation_deg=120.0 if up else 38.0,
        due="due: last point 3.1 d ago" if place == 0 else "last point 0.8 d ago, due in 1.2 d",
        is_due=place == 0,
    )


def invented_advice() -> tuple[tuple[Advice, ...], tuple[Advice, ...]]:
    at = MIDNIGHT - 0.085
    tonight = (
        Advice("2031-05-29", at, "I", 3, 110.0, 41.0, 1.14, 7.8, 0.131, "I at +21 d: second maximum fixes Δm15"),
        Advice("2031-05-29", at + 0.006, "B", 1, 180.0, 38.0, 1.15, 3.4, 0.1286, "B at +21 d: decline fixes Δm15"),
    )
    later = (
        Advice("2031-06-04", at + 6, "V", 1, 60.0, 40.0, 1.2, 2.9, 0.1269, "V at +27 d: colour fixes the host's dust"),
    )
    return tonight, later


def invented_plan(snapshot: Snapshot) -> Plan:
    mjd = np.linspace(START, END, 53)
    sun = -24.0 + 24.0 * ((mjd - MIDNIGHT + 0.02) / 0.18) ** 2
    moon = -10.0 + 60.0 * (mjd - START) / (END - START)
    plans = []
    for place, view in enumerate(snapshot.targets):
        night = night_of_target(view.target, mjd, place)
        if place == 0:
            sentence = "I B tonight, 11 min: the error of μ falls from 0.139 to about 0.129."
            plans.append(TargetPlan(view.target, night, sentence, *invented_advice()))
        else:
            why = night.why_not or "the next exposure that pays is B at +15 d: decline fixes Δm15, on 2031-06-02"
            plans.append(TargetPlan(view.target, night, f"nothing useful tonight: {why}."))
    assert math.isclose(sun.min(), -24.0, abs_tol=0.1)
    return Plan(
        night="2031-05-29", now_mjd=MIDNIGHT - 0.15, mjd=tuple(mjd.tolist()), sun_altitude_deg=tuple(sun.tolist()),
        moon_altitude_deg=tuple(moon.tolist()), moon_illumination=0.34,
        twilight=(("Sun", START, END),), targets=tuple(plans), cautions=(CAUTION, GENERAL),
    )  # fmt: skip
