"""Which exposures bring a type Ia modulus to its goal with the least telescope time, and which of them are tonight's.

From tonight the cheapest way to the goal is built exposure by exposure: always the night's bundle of exposures that
lowers the expected variance of μ most for each minute, a coming night's gain counting by the chance that it is clear.
What of it falls on tonight is the advice; the next night everything is built anew with what was really seen.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from reduce.plan.forecast import Outlook, Slot
from reduce.plan.hours import Option, rounded
from reduce.records import Floats
from reduce.settings import Planning

MOST_STEPS = 40
LEAST_FALL = 0.002
"""Of the variance of μ (relative), which an exposure must bring to be named at all."""
Bundle = list[tuple[int, Option, float]]
"""Slot, how it is filled, seconds."""
PARAMETERS = ("μ", "host dust", "time of maximum", "Δm15")
SECOND_MAXIMUM_D = (17.0, 40.0)
"""Rest-frame days at which R, I, r and i pass their shoulder or second maximum."""
DECLINE_D = (8.0, 22.0)


@dataclass(frozen=True, slots=True)
class Step:
    """One exposure of the cheapest way, in the order in which it was chosen."""

    slot: int
    option: Option
    minutes: float
    """With its share of slew and filter."""
    mu_variance: float
    """Expected after it, mag²."""
    parameter: int
    """Of `PARAMETERS`: what it settles."""


def cheapest_way(
    outlook: Outlook,
    slots: Sequence[Slot],
    options: Sequence[Sequence[Option]],
    goal_variance: float,
    cost: Planning,
    tonight: str,
) -> list[Step]:
    """Exposures until the expected variance of μ reaches the goal, or until none is worth naming.

    Parameters
    ----------
    outlook
        Of the slots; it is left as it is.
    options
        Ways to fill each slot, may be empty.
    """
    now = outlook.copy()
    nights: dict[str, list[int]] = {}
    for k, slot in enumerate(slots):
        if options[k]:
            nights.setdefault(slot.night, []).append(k)
    visited: set[str] = set()
    filters: set[tuple[str, str]] = set()
    way: list[Step] = []
    while now.mu_variance > goal_variance and len(way) < MOST_STEPS:
        bundles = {
            night: _bundle(now, rows, slots, options, cost, night in visited, {b for n, b in filters if n == night})
            for night, rows in nights.items()
        }
        chance = {night: 1.0 if night == tonight else cost.clear_chance for night in nights}
        best = max(bundles, key=lambda night: (bundles[night][0] * chance[night], night), default=None)
        if best is None or not bundles[best][1]:
            break
        for k, option, seconds in bundles[best][1]:
            if now.mu_variance <= goal_variance:
                break
            before = now.theta.mean(axis=0)
            now.take(k, option.variance)
            after = now.theta.mean(axis=0)
            filters.add((best, slots[k].band))
            way.append(Step(k, option, seconds / 60.0, float(after[0, 0]), settled(before, after)))
        visited.add(best)
    return _pruned(outlook, slots, way, goal_variance)


def _pruned(outlook: Outlook, slots: Sequence[Slot], way: list[Step], goal_variance: float) -> list[Step]:
    """The way without the nights, and then the exposures, that what was chosen after them made needless."""
    if not way or way[-1].mu_variance > goal_variance:
        return way
    place = {k: i for i, k in enumerate(dict.fromkeys(step.slot for step in way))}
    local = outlook.only(list(place))

    def enough(steps: Sequence[Step]) -> bool:
        now = local.copy()
        for step in steps:
            now.take(place[step.slot], step.option.variance)
        return now.mu_variance <= goal_variance

    for group in (lambda step: slots[step.slot].night, id):
        costs: dict[object, float] = {}
        for step in way:
            costs[group(step)] = costs.get(group(step), 0.0) + step.minutes
        for key in sorted(costs, key=lambda key: -costs[key]):
            rest = [step for step in way if group(step) != key]
            if enough(rest):
                way = rest
    return way


def _bundle(
    now: Outlook,
    rows: Sequence[int],
    slots: Sequence[Slot],
    options: Sequence[Sequence[Option]],
    cost: Planning,
    there: bool,
    filters: set[str],
) -> tuple[float, Bundle]:
    """The exposures of one night with the most fall of variance per second, and that."""
    local = now.only(rows)
    start = local.mu_variance
    used, total = set(filters), 0.0 if there else cost.slew_s
    slew_s = total
    chosen: Bundle = []
    best: tuple[float, Bundle] = (0.0, [])
    for _ in range(2 * len(rows)):
        found: tuple[float, int, Option, float] | None = None
        for place, row in enumerate(rows):
            change = 0.0 if slots[row].band in used else cost.filter_s
            for option in options[row]:
                seconds = option.seconds(cost) + change
                fall = local.gain(place, option.variance)
                rate = (start - local.mu_variance + fall) / (total + seconds)
                if fall > LEAST_FALL * start and (found is None or rate > found[0]):
                    found = rate, place, option, seconds
        if found is None or found[0] <= best[0]:
            break
        rate, place, option, seconds = found
        local.take(place, option.variance)
        total += seconds
        used.add(slots[rows[place]].band)
        chosen.append((rows[place], option, seconds + (0.0 if chosen else slew_s)))
        best = rate, list(chosen)
    return best


def settled(before: Floats, after: Floats) -> int:
    """Which parameter's better knowledge did most for μ; 0: none, it only averages scatter."""
    share = before[0, 1:] ** 2 / np.diag(before)[1:] / before[0, 0]
    score = share * (1.0 - np.diag(after)[1:] / np.diag(before)[1:])
    return int(np.argmax(score)) + 1 if score.max() > 0.01 else 0


def reason(band: str, phase: float, parameter: int) -> str:
    """Why an exposure helps, in words."""
    when = f"{band} at {phase:+.0f} d"
    if parameter == 1:
        return f"{when}: colour fixes the host's dust"
    if parameter == 2:
        return f"{when}: fixes the time of maximum"
    if parameter == 3 and band in "RIri" and SECOND_MAXIMUM_D[0] <= phase <= SECOND_MAXIMUM_D[1]:
        return f"{when}: second maximum fixes Δm15"
    if parameter == 3 and DECLINE_D[0] <= phase <= DECLINE_D[1]:
        return f"{when}: decline fixes Δm15"
    if parameter == 3:
        return f"{when}: fixes Δm15"
    return f"{when}: averages its scatter"


def scheduled(
    outlook: Outlook, slots: Sequence[Slot], way: Sequence[Step], cost: Planning, tonight: str
) -> tuple[list[Step], list[Step]]:
    """The way as it would be observed: tonight's exposures as chosen, then the later ones by time.

    Exposures of one slot become one; the variance of μ after each, and its minutes, follow that order.
    """
    ways: dict[int, list[Option]] = {}
    for step in way:
        ways.setdefault(step.slot, []).append(step.option)
    now_slots = [k for k in ways if slots[k].night == tonight]
    later_slots = sorted((k for k in ways if slots[k].night != tonight), key=lambda k: (slots[k].night, slots[k].mjd))
    now = outlook.copy()
    steps, visited = [], set()
    for k in now_slots + later_slots:
        option = _together(ways[k])
        seconds = option.seconds(cost) + cost.filter_s + (0.0 if slots[k].night in visited else cost.slew_s)
        visited.add(slots[k].night)
        before = now.theta.mean(axis=0)
        now.take(k, option.variance)
        after = now.theta.mean(axis=0)
        steps.append(Step(k, option, seconds / 60.0, float(after[0, 0]), settled(before, after)))
    return steps[: len(now_slots)], steps[len(now_slots) :]


def _together(options: Sequence[Option]) -> Option:
    n = sum(option.n for option in options)
    total = sum(option.n * option.exposure_s for option in options)
    return Option(n, rounded(total / n), float(np.sqrt(sum(option.snr**2 for option in options))))
