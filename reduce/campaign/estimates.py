"""From points to an estimate, and what made it change."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np

from reduce.candles.assumptions import Assumptions
from reduce.candles.candle import candle_for
from reduce.candles.distance import MODEL_H0, mpc_with_errors
from reduce.curve.light_curve import to_light_curve
from reduce.exchange.light_curve_file import read_light_curves
from reduce.records import Estimate, LightCurve, Point, Target
from reduce.settings import Distance, Settings
from reduce.version import version

MODEL_OWN = Assumptions()
SAMPLES_SEED = 40117
"""Equal light curves give equal draws."""


def assumptions_of(
    settings: Settings | None, h0: float | None = None, m_b: float | None = None, without: Iterable[str] = ()
) -> Assumptions:
    """What type Ia distances stand on: the caller's word, else the settings', else the model's."""
    chosen = settings.distance if settings is not None else Distance()
    if h0 is not None or m_b is not None:
        return Assumptions(h0 or MODEL_H0, m_b, frozenset(without))
    return Assumptions(chosen.h0 or MODEL_H0, chosen.m_b, frozenset(without))


def estimate_target(target: Target, night_points: Sequence[Point], assumptions: Assumptions = MODEL_OWN) -> Estimate:
    """Fit the target's nightly points with the relation of its kind."""
    mine = [point for point in night_points if point.star == target.name]
    found = _with_distance(candle_for(target.kind, assumptions).fit(to_light_curve(mine), target))
    doubtful = sum(point.state == "doubtful" for point in mine)
    if found.mu is None and doubtful:
        left_out = f"{doubtful} doubtful nightly points are left out: keep their frames to use them."
        found = replace(found, verdict=f"{found.verdict} {left_out}")
    return found


def estimate_file(path: Path, assumptions: Assumptions = MODEL_OWN) -> Iterator[Estimate]:
    """Fit every object of a light-curve file, in the order of the file."""
    for target, curve in read_light_curves(path):
        yield _with_distance(candle_for(target.kind, assumptions).fit(curve, target))


def _with_distance(estimate: Estimate) -> Estimate:
    if estimate.mu is None or estimate.mu_err is None:
        return estimate
    return replace(estimate, distance_mpc=mpc_with_errors(estimate.mu, estimate.mu_err))


def sample_rows(
    curves: Iterable[tuple[Target, LightCurve]], n: int, assumptions: Assumptions
) -> Iterator[tuple[str, tuple[float, ...] | None]]:
    """(name, draw of μ, host E(B−V), t_max, Δm15) with all errors, n of each type Ia supernova; None: no distance."""
    from reduce.candles import type_ia

    for target, curve in curves:
        generator = np.random.default_rng(SAMPLES_SEED)
        draws = type_ia.draws(curve, target, n, generator, assumptions) if target.kind == "type_ia" else None
        if draws is None:
            yield target.name, None
            continue
        for row in draws.tolist():
            yield target.name, tuple(row)


def inputs_digest(target: Target, night_points: Sequence[Point], assumptions: Assumptions = MODEL_OWN) -> str:
    """Digest of everything an estimate depends on; equal digests mean an equal estimate."""
    mine = [asdict(point) for point in night_points if point.star == target.name and point.state in ("kept", "limit")]
    stands_on = [] if assumptions == MODEL_OWN else [assumptions.h0, assumptions.m_b, sorted(assumptions.without)]
    text = json.dumps([version(), asdict(target), mine, stands_on], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()
