"""From points to the posterior: scan, settle on the peak, mark outliers, explore."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.candles.posterior import (
    Data,
    Nodes,
    System,
    evaluate,
    explore,
    residuals,
    system_at,
)
from reduce.candles.search import LEAST_POINTS, scan
from reduce.records import Floats

REJECT_SIGMA, REJECT_MAG = 4.5, 0.15
"""A point is marked as an outlier beyond both."""
LARGEST_REJECTED = 0.2
LEAST_TO_REJECT = 8
SECOND_PEAK = 0.05
"""A second maximum of the posterior in t_max counts from this fraction of the first."""
PEAK_DIP = 0.5
"""Two maxima are two when the posterior between them falls to this fraction of the lower one."""
LEAST_APART_D = 3.0
"""Maxima closer than this are one time of maximum, known less well."""
DM15_STEP = 0.05
CLOCK_ERROR_D, CLOCK_ERROR_PER_DAY, CLOCK_LATEST_D = 0.5, 0.02, 30.0
"""Added in quadrature to the error of t_max when the first point comes p > 0 days after maximum: 0.5 d + 0.02 p, to
+30 d, all in the rest frame.

Measured on 75 supernovae of the public nearby samples whose light curves were cut to begin at +5 to +20 d (the half
whose names are not held out): t_max differed from that of the whole light curve by 0.7 d more than the grid allows.
"""


@dataclass(frozen=True, slots=True)
class Solved:
    """The posterior with its moments, on the model's own scale (H0 = 73.04)."""

    data: Data
    keep: NDArray[np.bool_]
    """Of ``data.mags``: False marks an outlier."""
    system: System
    nodes: Nodes
    mean: Floats
    """(μ, host E, t_max, Δm15)."""
    cov: Floats
    """(4, 4) covariance of ``mean``, the clock's error included."""
    residual: Floats
    """Of the points of ``system`` at the most probable node, mag."""
    chi2: float
    clock_err_d: float
    """Part of the error of t_max that the grid does not hold, observed days; see `_clock_error`."""

    @property
    def err(self) -> Floats:
        """Square roots of the diagonal of ``cov``."""
        return np.asarray(np.sqrt(np.diag(self.cov)), float)

    @property
    def n_rejected(self) -> int:
        """Magnitude points marked as outliers."""
        return int((~self.keep).sum())


def solve(data: Data) -> Solved | None:
    """Fit; None when no time of maximum puts three points inside the range of the model."""
    start = scan(data.mags, data.z, data.model).best
    if start is None:
        return None
    t_max, dm15 = start
    keep = np.ones(len(data.mags), bool)
    low, high = data.model.prior.dm15_range
    dm15_grid = np.arange(low, high + 0.5 * DM15_STEP, DM15_STEP)
    for turn in range(4):
        if (keep & data.in_range(t_max)).sum() < LEAST_POINTS:
            return None
        system = system_at(data, keep, t_max)
        span = 6.0 if turn == 0 else 3.0
        trial = np.arange(t_max - span, t_max + span + 0.01, 0.5)
        trial = trial[[bool((keep & data.in_range(t)).sum() >= LEAST_POINTS) for t in trial.tolist()]]
        nodes = evaluate(system, data, trial, dm15_grid)
        i, j = nodes.peak
        moved = abs(nodes.t_max[i] - t_max) > 0.3 or abs(nodes.dm15[j] - dm15) > 0.06
        t_max, dm15 = float(nodes.t_max[i]), float(nodes.dm15[j])
        if turn == 0:
            keep = _without_outliers(data, t_max, dm15)
        elif not moved:
            break
    if (keep & data.in_range(t_max)).sum() < LEAST_POINTS:
        return None
    system = system_at(data, keep, t_max)
    return _summary(data, keep, system, explore(system, data, t_max))


def _without_outliers(data: Data, t_max: float, dm15: float) -> NDArray[np.bool_]:
    """Points to keep: at most a fifth is marked, the worst first."""
    keep = np.ones(len(data.mags), bool)
    inside = data.in_range(t_max)
    if inside.sum() < LEAST_TO_REJECT:
        return keep
    system = system_at(data, keep, t_max)
    node = evaluate(system, data, np.array([t_max]), np.array([dm15]))
    left = residuals(system, data, t_max, dm15, float(node.mu[0, 0]), float(node.e[0, 0]))
    left = left - np.median(left)
    sigma = np.sqrt(np.diag(system.parts.total))
    excess = np.abs(left) / np.maximum(REJECT_SIGMA * sigma, REJECT_MAG)
    worst = np.argsort(-excess, kind="stable")[: int(LARGEST_REJECTED * len(system))]
    keep[np.flatnonzero(inside)[worst[excess[worst] > 1.0]]] = False
    return keep


def _summary(data: Data, keep: NDArray[np.bool_], system: System, nodes: Nodes) -> Solved:
    weight = nodes.weight
    t_grid, d_grid = np.meshgrid(nodes.t_max, nodes.dm15, indexing="ij")
    values = np.array([nodes.mu, nodes.e, t_grid, d_grid])
    mean = (weight * values).sum(axis=(1, 2))
    offset = values - mean[:, None, None]
    cov = np.einsum("ij,aij,bij->ab", weight, offset, offset)
    within = (weight * np.array([nodes.mu_var, nodes.e_var, nodes.mu_e])).sum(axis=(1, 2))
    cov[0, 0] += within[0]
    cov[1, 1] += within[1]
    cov[0, 1] += within[2]
    cov[1, 0] += within[2]
    i, j = nodes.peak
    mu, e = float(nodes.mu[i, j]), float(nodes.e[i, j])
    left = residuals(system, data, float(nodes.t_max[i]), float(nodes.dm15[j]), mu, e)
    white = system.whitener @ left
    clock = _clock_error(data, system, float(mean[2]))
    cov[2, 2] += clock**2
    return Solved(data, keep, system, nodes, mean, cov, left, float(white @ white), clock)


def _clock_error(data: Data, system: System, t_max: float) -> float:
    """Supernovae do not keep time with the templates: what that adds where no point precedes maximum, observed days."""
    first = float(data.phase(system.points.mjd, t_max).min())
    if first <= 0.0:
        return 0.0
    return (CLOCK_ERROR_D + CLOCK_ERROR_PER_DAY * min(first, CLOCK_LATEST_D)) * (1.0 + data.z)


def separate_maxima(nodes: Nodes) -> list[float]:
    """Times of maximum light that the posterior tells apart, the most probable first."""
    p = nodes.weight.sum(axis=1)
    inner = np.concatenate([[0.0], p, [0.0]])
    tops = np.flatnonzero((inner[1:-1] >= inner[:-2]) & (inner[1:-1] > inner[2:]))
    found: list[int] = []
    for top in sorted(tops.tolist(), key=lambda k: -p[k]):
        apart = all(
            p[min(top, other) : max(top, other) + 1].min() < PEAK_DIP * min(p[top], p[other]) for other in found
        )
        distant = all(abs(nodes.t_max[top] - nodes.t_max[other]) > LEAST_APART_D for other in found)
        if apart and distant and (not found or p[top] > SECOND_PEAK * p[found[0]]):
            found.append(top)
    return [float(nodes.t_max[k]) for k in found]
