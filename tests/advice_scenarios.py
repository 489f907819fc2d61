"""Telescope time that advice needs to reach a goal, against two fixed cadences; ``advice_scenarios.toml`` says what.

    python tests/advice_scenarios.py [first seed [last seed]]

prints a JSON line a supernova and way of observing, and a summary. Light curves come from the model's equation with its
scatter, errors of bands and nights, and photon noise of the telescope; the grey scatter, which no exposure reduces, is
left out of both the expected and the actual error.
"""

from __future__ import annotations

import json
import sys
import tomllib
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np

from reduce.candles.covariance import covariance
from reduce.candles.distance import hubble_modulus
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, type_ia_model
from reduce.candles.points import Points
from reduce.plan.exposure import BandNoise, TelescopeNoise
from reduce.plan.forecast import solved_curve
from reduce.plan.hours import Hours, Option, best_hour, hours, options
from reduce.plan.moonlight import v_mag_arcsec2
from reduce.plan.supernova import supernova_plan
from reduce.plan.telescope import DARK_SKY, EXTINCTION, MOON_COLOUR
from reduce.plan.tonight import next_night, night_sky, target_night, track
from reduce.records import LightCurve, Point, Target
from reduce.settings import Planning, Site

SCENARIO = tomllib.loads((Path(__file__).parent / "advice_scenarios.toml").read_text(encoding="utf-8"))
SITE = Site(**SCENARIO["site"])
COST = Planning(
    **SCENARIO["costs"], clear_chance=SCENARIO["clear_chance"], mu_err_goal=float(np.hypot(SCENARIO["goal_mag"], 0.106))
)
BANDS = tuple(SCENARIO["telescope"]["zero_point"])


@cache
def noise() -> TelescopeNoise:
    scope = SCENARIO["telescope"]
    bands = {}
    for band, zero_point in scope["zero_point"].items():
        dark = 10.0 ** (-0.4 * (DARK_SKY[band] - 1.0 - zero_point))  # a magnitude brighter than a good site
        moon = 10.0 ** (-0.4 * (v_mag_arcsec2(1.0) + MOON_COLOUR[band] - zero_point))
        bands[band] = BandNoise(zero_point, EXTINCTION[band], dark, moon, scope["err_night_mag"], 120.0, 1)
    return TelescopeNoise(
        bands, scope["scale_arcsec"], scope["fwhm_arcsec"], scope["read_noise_e"], scope["dark_e_s_px"],
        scope["saturation_e"], scope["aperture_m"], SITE.height_m, 1.5,
    )  # fmt: skip


def target(z: float = 0.02) -> Target:
    return Target("Farrow 3", "type_ia", SCENARIO["target"]["ra_deg"], SCENARIO["target"]["dec_deg"], z,
                  SCENARIO["target"]["ebv_mw"], spectroscopic_type="Ia")  # fmt: skip


@cache
def hours_of(night: str) -> Hours:
    sky = night_sky(night, SITE, 1.0 / 48.0)
    return hours(sky, track(target(), sky, SITE, COST))


@dataclass
class World:
    """One supernova and its weather: what a point of any night and band would show."""

    target: Target
    first_night: str
    t_max: float
    dm15: float
    mu: float
    clear: list[bool]
    mag: dict[tuple[str, str], float]
    """(night, band) → true magnitude with the supernova's scatter and the errors of band and night."""
    rng: np.random.Generator
    """For photons: each way of observing has its own."""

    def night(self, day: int) -> str:
        return next_night(self.first_night, day)


def world(seed: int, way: int) -> World:
    rng = np.random.default_rng([seed, 0])
    sn = SCENARIO["supernova"]
    z = float(rng.uniform(*sn["z"]))
    e_host = float(rng.exponential(sn["e_host_scale"]))
    while True:
        low, high = sn["dm15_sigma"]
        step = float(rng.normal())
        dm15 = sn["dm15_mode"] + abs(step) * (-low if rng.random() < low / (low + high) else high)
        if 0.75 <= dm15 <= 1.7:
            break
    found_at = float(rng.uniform(*sn["found_at_d"]))
    clear = [bool(value) for value in rng.random(SCENARIO["days"]) < SCENARIO["clear_chance"]]
    mu = hubble_modulus(z)
    first = SCENARIO["starts"][seed % len(SCENARIO["starts"])]
    nights = [next_night(first, day) for day in range(SCENARIO["days"])]
    times = {night: float(np.mean(hours_of(night).mjd)) for night in nights if hours_of(night).mjd}
    t_max = next(iter(times.values())) - found_at * (1.0 + z)
    mag = _true_mags(rng, times, t_max, dm15, mu, e_host, z)
    return World(target(z), first, t_max, dm15, mu, clear, mag, np.random.default_rng([seed, way]))


def _true_mags(rng, times, t_max, dm15, mu, e_host, z):
    model = type_ia_model()
    rows = [(band, night, mjd) for band in sorted(BANDS) for night, mjd in times.items()
            if FIRST_PHASE < (mjd - t_max) / (1 + z) < LAST_PHASE]  # fmt: skip
    n = len(rows)
    band = np.array([row[0] for row in rows])
    ends = {b: (int(np.searchsorted(band, b)), int(np.searchsorted(band, b, "right"))) for b in sorted(BANDS)}
    edges = tuple((b, slice(*rows_of)) for b, rows_of in ends.items())
    mjd = np.array([row[2] for row in rows])
    points = Points(
        edges, mjd, band, np.array([row[1] for row in rows]), np.zeros(n), np.zeros(n),
        np.full(n, SCENARIO["telescope"]["err_night_mag"]), np.full(n, model.scatter.zero_point), np.full(n, ""),
        np.zeros(n, bool),
    )  # fmt: skip
    phase = (mjd - t_max) / (1.0 + z)
    shape = model.standard_mags(edges, phase, np.array([dm15]), z)[:, 0]
    total = covariance(points, phase, model).total
    off = np.linalg.cholesky(total + 1e-12 * np.eye(n)) @ rng.normal(size=n)
    ebv_mw = SCENARIO["target"]["ebv_mw"]
    dust = np.array([model.host_coefficient(b, z) * e_host + model.mw_coefficients[b] * ebv_mw for b in band])
    return {(row[1], row[0]): float(value) for row, value in zip(rows, shape + mu + dust + off, strict=True)}


@dataclass
class Taken:
    night: str
    mjd: float
    band: str
    mag: float
    err: float
    seconds: float


def expose(here: World, night: str, band: str, mjd: float, option: Option) -> Taken | None:
    true = here.mag.get((night, band))
    if true is None:
        return None
    met = hours_of(night).conditions[int(np.argmin(np.abs(np.array(hours_of(night).mjd) - mjd)))]
    snr = noise().snr(band, true, option.exposure_s, met, option.n)
    flux = 1.0 + here.rng.normal() / snr
    if flux < 3.0 / snr:
        return None
    return Taken(night, mjd, band, true - 2.5 * np.log10(flux), 1.0857 / snr, option.seconds(COST))


def curve_of(points: Sequence[Taken]) -> LightCurve:
    def column(values):
        return np.array(list(values), float)

    mag, err = column(p.mag for p in points), column(p.err for p in points)
    flux = 10.0 ** (-0.4 * (mag - 25.0))
    return LightCurve(
        column(p.mjd for p in points), np.array([p.band for p in points], "U2"), mag, err,
        np.full(len(points), SCENARIO["telescope"]["err_night_mag"]), np.full(len(points), np.nan), flux,
        flux * err / 1.0857, np.array([p.night for p in points], "U10"),
    )  # fmt: skip


def as_points(points: Sequence[Taken], name: str) -> list[Point]:
    return [
        Point(name, None, p.night, p.band, p.mjd, None, p.mag, p.err, 0.01, None, 1.0, 1.0, "kept") for p in points
    ]  # fmt: skip


Wish = list[tuple[str, float, Option]]
"""Band, time, frames."""


def advised(here: World, day: int, points: Sequence[Taken]) -> Wish:
    night = here.night(day)
    sky = night_sky(night, SITE, 1.0 / 48.0)
    known = as_points(points, here.target.name)
    when = [hours_of(here.night(k)) for k in range(day, min(day + 40, SCENARIO["days"]))]
    row = target_night(here.target, sky, SITE, COST, known, sky.middle)
    solved = solved_curve(curve_of(points), here.target) if points else None
    plan = supernova_plan(here.target, row, solved, None, known, noise(), when, COST)
    return [(one.band, one.mjd, Option(one.n, one.exposure_s, one.snr)) for one in plan.tonight]


def cadence(name: str) -> Callable[[World, int, Sequence[Taken]], Wish]:
    rule = SCENARIO[name]

    def wish(here: World, day: int, points: Sequence[Taken]) -> Wish:
        night = here.night(day)
        done = {p.night for p in points}
        if any(here.night(day - k) in done for k in range(1, rule["every_d"])):
            return []
        wanted: Wish = []
        for band in rule["bands"]:
            mag = here.mag.get((night, band))  # the observer knows roughly how bright it is
            best = best_hour(noise(), band, mag, hours_of(night)) if mag is not None else None
            ways = options(noise(), band, mag, best[1], COST, (rule["snr"], rule["snr"] / 2.0)) if best else ()
            if best and ways:
                wanted.append((band, best[0], ways[0]))
        return wanted

    return wish


WAYS = {"advice": advised, "every_second_night": cadence("every_second_night"), "thinned": cadence("thinned")}


def follow(seed: int, way: str) -> dict:
    """One supernova observed one way, to the goal or the end."""
    here = world(seed, 1 + list(WAYS).index(way))
    points: list[Taken] = []
    seconds, reached, at_30 = 0.0, None, None
    sigma = error = None
    history: list[tuple[float | None, float | None, float]] = []
    for day in range(SCENARIO["days"]):
        if here.clear[day] and hours_of(here.night(day)).mjd:
            wish = WAYS[way](here, day, points)
            if wish:
                seconds += COST.slew_s + sum(COST.filter_s + option.seconds(COST) for _, _, option in wish)
                taken = [expose(here, here.night(day), band, mjd, option) for band, mjd, option in wish]
                points += [one for one in taken if one is not None]
                solved = solved_curve(curve_of(points), here.target) if len(points) > 2 else None
                if solved is not None:
                    sigma, error = float(solved.err[0]), float(solved.mean[0]) - here.mu
                history.append((sigma, error, seconds / 60.0))
        if day == 30:
            at_30 = (sigma, error, seconds / 60.0)
        if sigma is not None and sigma <= SCENARIO["goal_mag"] and reached is None:
            reached = {"day": day, "minutes": seconds / 60.0, "nights": len({p.night for p in points}), "sigma": sigma,
                       "error": error}  # fmt: skip
            if at_30 is not None or way == "advice":
                break
        if reached is not None and at_30 is not None:
            break
    return {"seed": seed, "way": way, "z": here.target.z, "dm15": here.dm15, "reached": reached, "at_30": at_30,
            "by_night": history, "end": {"sigma": sigma, "error": error, "minutes": seconds / 60.0}}  # fmt: skip


EQUAL_NIGHTS = 5
"""Observed nights after which all ways are compared; advice that has reached its goal before observes no more."""


def _rms(values: Sequence[float]) -> float:
    return float(np.sqrt(np.mean(np.square(values)))) if len(values) else float("nan")


def summary(rows: Sequence[dict]) -> dict[str, dict[str, float]]:
    """Of each way: how many reached the goal, and minutes, days and actual error where they did."""
    found = {}
    for way in [way for way in WAYS if any(row["way"] == way for row in rows)]:
        mine = [row for row in rows if row["way"] == way]
        fifth = [row["by_night"][:EQUAL_NIGHTS][-1] for row in mine]
        done = [row["reached"] for row in mine if row["reached"]]
        spent = [(row["reached"] or row["end"])["minutes"] for row in mine]
        found[way] = {
            "supernovae": len(mine),
            "reached": len(done),
            "median_minutes": float(np.median(spent)),
            "mean_minutes": float(np.mean(spent)),
            "median_day": float(np.median([one["day"] for one in done])) if done else float("nan"),
            "rms_error": _rms([one["error"] for one in done]),
            "rms_pull": _rms([one["error"] / one["sigma"] for one in done]),
            "median_sigma_at_equal_nights": float(np.median([one[0] for one in fifth])),
            "rms_error_at_equal_nights": _rms([one[1] for one in fifth]),
            "mean_minutes_at_equal_nights": float(np.mean([one[2] for one in fifth])),
        }
    return found


def main() -> None:
    seeds = list(SCENARIO["seeds"])
    if len(sys.argv) > 1:
        last = int(sys.argv[2]) if len(sys.argv) > 2 else int(sys.argv[1])
        seeds = [seed for seed in seeds if int(sys.argv[1]) <= seed <= last]
    rows = []
    for seed in seeds:
        for way in WAYS:
            rows.append(follow(seed, way))
            print(json.dumps(rows[-1]), flush=True)
    print(json.dumps(summary(rows), indent=1))


if __name__ == "__main__":
    main()
