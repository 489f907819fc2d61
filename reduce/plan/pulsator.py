"""Advice for Cepheids and RR Lyrae stars: fill the widest gap of the folded light curve."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from reduce.almanac.times import mjd_to_jd
from reduce.plan.exposure import Conditions, TelescopeNoise
from reduce.plan.hours import Hours, options
from reduce.records import Estimate, Point, Target
from reduce.settings import Planning
from reduce.views import Advice, TargetNight, TargetPlan

WANTED_BANDS = ("V", "I")
"""Of the reddening-free index; what the telescope lacks is replaced by what it has."""
SMALL_GAP = 0.1
"""Of phase; below it a series is well covered (common practice)."""
ENOUGH_POINTS = {"cepheid": 12, "rr_lyrae": 20}
"""In each band, with even phases (common practice)."""
LONGEST_SHARE = 0.02
"""Of the period, that an exposure may last (common practice)."""
WANTED_SNR = 50.0


def pulsator_plan(
    target: Target,
    night: TargetNight,
    estimate: Estimate | None,
    points: Sequence[Point],
    noise: TelescopeNoise,
    when: Sequence[Hours],
    cost: Planning,
) -> TargetPlan:
    """Bands and hour tonight that come nearest to the middle of the widest phase gap."""
    if not when or not when[0].mjd:
        return TargetPlan(target, night, f"nothing tonight: {night.why_not or 'the observable hours have passed'}.")
    bands = [band for band in WANTED_BANDS if band in noise.bands] or sorted(noise.bands)[:2]
    pulsation = estimate.pulsation if estimate is not None else None
    advice: list[Advice] = []
    for band in bands:
        mine = [p for p in points if p.band == band and p.mag is not None and p.state == "kept"]
        mag = float(np.median([p.mag for p in mine if p.mag is not None])) if mine else None
        if pulsation is None:
            k, gap, why = len(when[0].mjd) // 2, 1.0, f"{band}: no period yet, every hour and night is new"
        else:
            phases = [_phase(p.mjd, pulsation.period_d, pulsation.epoch_bjd) for p in mine]
            start, gap = widest_gap(phases)
            if gap < SMALL_GAP and len(mine) >= ENOUGH_POINTS.get(target.kind, 12):
                continue
            offers = [_phase(t, pulsation.period_d, pulsation.epoch_bjd) for t in when[0].mjd]
            k, inside = nearest_to_gap(offers, start, gap)
            if not inside:
                continue
            at = offers[k]
            why = f"{band} at phase {at:.2f}: the widest gap runs from {start:.2f} over {gap:.2f} of the period"
        advice += _exposure(target, noise, band, mag, when[0].night, when[0].mjd[k], when[0].conditions[k], why, cost,
                            pulsation.period_d if pulsation else None, first=not advice)  # fmt: skip
    if not advice:
        reach = "no gap of the phases comes round while it is up" if pulsation is not None else "too faint"
        return TargetPlan(target, night, f"nothing useful tonight: {reach}.")
    minutes = sum(one.minutes for one in advice)
    what = "fills the widest gap of its phases" if pulsation is not None else "helps to find its period"
    sentence = f"{' '.join(one.band for one in advice)} tonight, {minutes:.0f} min: {what}."
    return TargetPlan(target, night, sentence, tuple(advice))


def widest_gap(phases: Sequence[float]) -> tuple[float, float]:
    """(phase at which it begins, width) of the widest gap of a folded series."""
    if not phases:
        return 0.0, 1.0
    ordered = np.sort(np.asarray(phases) % 1.0)
    widths = np.diff(np.append(ordered, ordered[0] + 1.0))
    k = int(np.argmax(widths))
    return float(ordered[k]), float(widths[k])


def nearest_to_gap(phases: Sequence[float], start: float, width: float) -> tuple[int, bool]:
    """The phase on offer that is nearest to a gap's middle, and whether it lies inside the gap's middle half."""
    middle = start + width / 2.0
    away = np.abs((np.asarray(phases) - middle + 0.5) % 1.0 - 0.5)
    k = int(np.argmin(away))
    return k, bool(away[k] <= width / 4.0)


def _phase(mjd: float, period_d: float, epoch_bjd: float) -> float:
    return (float(mjd_to_jd(mjd)) - epoch_bjd) / period_d % 1.0


def _exposure(
    target: Target,
    noise: TelescopeNoise,
    band: str,
    mag: float | None,
    night: str,
    mjd: float,
    met: Conditions,
    why: str,
    cost: Planning,
    period_d: float | None,
    *,
    first: bool,
) -> list[Advice]:
    n, exposure_s, snr = 1, noise.bands[band].usual_exposure_s, math.nan
    if mag is not None:
        ways = options(noise, band, mag, met, cost, (WANTED_SNR, WANTED_SNR / 2.0))
        if not ways:
            return []
        n, exposure_s, snr = ways[0].n, ways[0].exposure_s, ways[0].snr
    if period_d is not None and n * exposure_s > LONGEST_SHARE * period_d * 86400.0:
        why += f"; longer than {LONGEST_SHARE:.0%} of the period, which smooths the light curve"
    seconds = n * (exposure_s + cost.readout_s) + cost.filter_s + (cost.slew_s if first else 0.0)
    return [Advice(night, mjd, band, n, exposure_s, snr, met.airmass, seconds / 60.0, None, why)]
