"""From points to an estimate, and what made it change."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Sequence
from dataclasses import asdict, replace
from pathlib import Path

from reduce.candles.candle import candle_for
from reduce.curve.light_curve import to_light_curve
from reduce.exchange.light_curve_file import read_light_curves
from reduce.records import Estimate, Point, Target
from reduce.version import version


def estimate_target(target: Target, night_points: Sequence[Point]) -> Estimate:
    """Fit the target's nightly points with the relation of its kind."""
    mine = [point for point in night_points if point.star == target.name]
    found = candle_for(target.kind).fit(to_light_curve(mine), target)
    doubtful = sum(point.state == "doubtful" for point in mine)
    if found.mu is None and doubtful:
        left_out = f"{doubtful} doubtful nightly points are left out: keep their frames to use them."
        found = replace(found, verdict=f"{found.verdict} {left_out}")
    return found


def estimate_file(path: Path) -> Iterator[Estimate]:
    """Fit every object of a light-curve file, in the order of the file."""
    for target, curve in read_light_curves(path):
        yield candle_for(target.kind).fit(curve, target)


def inputs_digest(target: Target, night_points: Sequence[Point]) -> str:
    """Digest of everything an estimate depends on; equal digests mean an equal estimate."""
    mine = [asdict(point) for point in night_points if point.star == target.name and point.state in ("kept", "limit")]
    text = json.dumps([version(), asdict(target), mine], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()
