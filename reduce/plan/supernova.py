"""Advice for a type Ia supernova: what tonight's exposures would do to its modulus, against the coming nights'."""

from __future__ import annotations

import math
from collections.abc import Sequence

from reduce.candles.distance import rest_phase
from reduce.candles.model import LAST_PHASE, type_ia_model
from reduce.candles.solve import Solved
from reduce.candles.type_ia import HOPELESS_CHI2
from reduce.plan.advice import Step, cheapest_way, reason, scheduled, settled
from reduce.plan.exposure import Conditions, TelescopeNoise
from reduce.plan.forecast import Outlook, Slot, expected_mag, outlook
from reduce.plan.hours import Hours, Option, best_hour, options, saturation_warnings
from reduce.records import Estimate, Point, Target
from reduce.settings import Planning
from reduce.views import Advice, TargetNight, TargetPlan

FIRST_SNR = 40.0
"""Wanted of the first points, before anything can be fitted."""
MOST_CANDIDATES = 12
TYPICAL_MAG = 16.0
"""Only to choose the hour of a target that nobody measured yet."""


def supernova_plan(
    target: Target,
    night: TargetNight,
    solved: Solved | None,
    estimate: Estimate | None,
    points: Sequence[Point],
    noise: TelescopeNoise,
    when: Sequence[Hours],
    cost: Planning,
) -> TargetPlan:
    """What to do tonight, and what the coming nights would add.

    Parameters
    ----------
    solved
        Posterior of the light curve; None when it cannot be fitted yet.
    when
        Observable hours, tonight first.
    """
    if solved is None:
        return _first_points(target, night, points, noise, when, cost)
    if solved.chi2 / len(solved.system) > HOPELESS_CHI2:
        return TargetPlan(target, night, "no advice: no normal type Ia varies like this.")
    slots, fills, met = _slots(solved, noise, when, cost)
    if not slots:
        return TargetPlan(target, night, f"nothing useful tonight: {_why_no_slot(solved, when)}.")
    ahead = outlook(solved, slots, {band: one.err_night_mag for band, one in noise.bands.items()})
    other = _other_variance(solved, estimate)
    goal = cost.mu_err_goal**2 - other
    tonight = when[0].night
    way = cheapest_way(ahead, slots, fills, goal, cost, tonight)
    now_steps, later = scheduled(ahead, slots, way, cost, tonight)

    def told(steps: Sequence[Step]) -> tuple[Advice, ...]:
        return tuple(_advice(step, slots[step.slot], met[step.slot], solved, other) for step in steps)

    candidates = told(_alone(ahead, slots, fills, cost))
    sentence = _sentence(night, solved, other, goal, told(now_steps), told(later), cost)
    warnings: tuple[str, ...] = ()
    if when[0].mjd:
        middle = len(when[0].mjd) // 2
        mags = {b: expected_mag(solved, b, when[0].mjd[middle]) for b in noise.bands if b in solved.data.model.bands}
        warnings = saturation_warnings(noise, mags, when[0].conditions[middle])
    return TargetPlan(target, night, sentence, told(now_steps), told(later), candidates, warnings)


def _why_no_slot(solved: Solved, when: Sequence[Hours]) -> str:
    times = [hours.mjd[0] for hours in when if hours.mjd]
    if not times:
        return "no observable hour in the coming weeks"
    phase = float(rest_phase(times[0], float(solved.mean[2]), solved.data.z))
    if phase > LAST_PHASE:
        return f"at {phase:+.0f} d it is past the light-curve model, which ends at {LAST_PHASE:+.0f} d"
    return "it is too faint, or too bright, for every exposure"


def _other_variance(solved: Solved, estimate: Estimate | None) -> float:
    """What the error of μ holds beside the fit: grey scatter, the Milky Way's dust, an unknown redshift; mag²."""
    if estimate is None or estimate.mu_err is None:
        return solved.data.model.scatter.grey**2
    return max(estimate.mu_err**2 - float(solved.cov[0, 0]), 0.0)


def _slots(
    solved: Solved, noise: TelescopeNoise, when: Sequence[Hours], cost: Planning
) -> tuple[list[Slot], list[tuple[Option, ...]], list[Conditions]]:
    slots, fills, met = [], [], []
    t_max, z = float(solved.mean[2]), solved.data.z
    bands = [band for band in noise.bands if band in solved.data.model.bands]
    for hours in when:
        if not hours.mjd or rest_phase(hours.mjd[0], t_max, z) > LAST_PHASE:
            continue
        for band in bands:
            mag = expected_mag(solved, band, hours.mjd[len(hours.mjd) // 2])
            best = best_hour(noise, band, mag, hours)
            if best is None:
                continue
            ways = options(noise, band, mag, best[1], cost)
            if ways:
                slots.append(Slot(hours.night, best[0], band))
                fills.append(ways)
                met.append(best[1])
    return slots, fills, met


def _alone(ahead: Outlook, slots: Sequence[Slot], fills: Sequence[Sequence[Option]], cost: Planning) -> list[Step]:
    """Each exposure as if it were the only one, with its whole slew, by its fall of variance per minute."""
    start = ahead.mu_variance
    found = []
    for k, ways in enumerate(fills):
        for option in ways:
            minutes = (option.seconds(cost) + cost.slew_s + cost.filter_s) / 60.0
            found.append((ahead.gain(k, option.variance) / minutes, k, option, minutes))
    steps: list[Step] = []
    taken: set[int] = set()
    for _, k, option, minutes in sorted(found, key=lambda row: (-row[0], row[1])):
        if k in taken or len(steps) >= MOST_CANDIDATES:
            continue
        taken.add(k)
        one = ahead.only([k])
        one.take(0, option.variance)
        settles = settled(ahead.theta.mean(axis=0), one.theta.mean(axis=0))
        steps.append(Step(k, option, minutes, start - ahead.gain(k, option.variance), settles))
    return steps


def _advice(step: Step, slot: Slot, met: Conditions, solved: Solved, other: float) -> Advice:
    phase = float(rest_phase(slot.mjd, float(solved.mean[2]), solved.data.z))
    return Advice(
        night=slot.night, mjd=slot.mjd, band=slot.band, n=step.option.n, exposure_s=step.option.exposure_s,
        snr=step.option.snr, airmass=met.airmass, minutes=step.minutes,
        mu_err=math.sqrt(step.mu_variance + other), reason=reason(slot.band, phase, step.parameter),
    )  # fmt: skip


def _sentence(
    night: TargetNight,
    solved: Solved,
    other: float,
    goal: float,
    tonight: Sequence[Advice],
    later: Sequence[Advice],
    cost: Planning,
) -> str:
    now_err = math.sqrt(float(solved.cov[0, 0]) + other)
    if float(solved.cov[0, 0]) <= goal:
        return f"nothing useful tonight: μ is good to ±{now_err:.3f}, the goal is ±{cost.mu_err_goal:g}."
    if tonight:
        minutes = sum(advice.minutes for advice in tonight)
        after = tonight[-1].mu_err or now_err
        bands = " ".join(dict.fromkeys(advice.band for advice in tonight))
        return f"{bands} tonight, {minutes:.0f} min: the error of μ falls from {now_err:.3f} to about {after:.3f}."
    if night.window is None:
        return f"nothing tonight: {night.why_not}."
    if later:
        first = later[0]
        return f"nothing useful tonight: the next exposure that pays is {first.reason}, on {first.night}."
    return f"nothing useful tonight: no exposure brings the error of μ ({now_err:.3f}) nearer to ±{cost.mu_err_goal:g}."


def _first_points(
    target: Target,
    night: TargetNight,
    points: Sequence[Point],
    noise: TelescopeNoise,
    when: Sequence[Hours],
    cost: Planning,
) -> TargetPlan:
    """Before anything can be fitted: one blue and one visual point a night."""
    if night.window is None or not when or not when[0].mjd:
        return TargetPlan(target, night, f"nothing tonight: {night.why_not or 'the observable hours have passed'}.")
    known = [band for band in ("B", "V", "g", "r", "R", "I", "i") if band in noise.bands]
    wanted = [band for band in known if band in ("B", "V")] or known[:2]
    advice = []
    for k, band in enumerate(band for band in wanted if band in type_ia_model().bands):
        seen = [point for point in points if point.band == band and point.mag is not None and point.state == "kept"]
        mag = seen[-1].mag if seen and seen[-1].mag is not None else None
        made = _first_exposure(noise, band, mag, when[0], cost)
        if made is None:
            continue
        mjd, met, option = made
        seconds = option.seconds(cost) + cost.filter_s + (0.0 if k else cost.slew_s)
        snr = option.snr if mag is not None else math.nan
        why = f"{band}: the first points must show colour and rise before μ can be fitted"
        advice.append(
            Advice(when[0].night, mjd, band, option.n, option.exposure_s, snr, met.airmass, seconds / 60.0, None, why)
        )
    minutes = sum(one.minutes for one in advice)
    bands = " ".join(one.band for one in advice)
    sentence = f"{bands} tonight, {minutes:.0f} min: too few points for a fit so far."
    return TargetPlan(target, night, sentence if advice else "too faint for a useful point tonight.", tuple(advice))


def _first_exposure(
    noise: TelescopeNoise, band: str, mag: float | None, when: Hours, cost: Planning
) -> tuple[float, Conditions, Option] | None:
    usual = noise.bands[band].usual_exposure_s
    best = best_hour(noise, band, TYPICAL_MAG if mag is None else mag, when)
    if best is None:
        return None
    if mag is None:
        return *best, Option(1, usual, 1.0)
    ways = options(noise, band, mag, best[1], cost, (FIRST_SNR, FIRST_SNR / 2.0))
    return (*best, ways[0]) if ways else None
