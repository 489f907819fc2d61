"""What the error of μ is made of; the squares of the lines add up to the square of the whole."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from reduce.candles.posterior import System
from reduce.candles.reddening import RELATIVE_MAP_ERROR, milky_way_extinction
from reduce.candles.solve import Solved
from reduce.records import BudgetLine, Target

UNKNOWN_EBV_ERROR = 0.05
"""E(B-V) in mag that a sky position of unknown reddening may hide; typical away from the Galactic plane."""


def total_error(lines: Iterable[BudgetLine]) -> float:
    """Quadrature sum of the lines, mag."""
    return math.sqrt(sum(line.mag**2 for line in lines))


def milky_way_slope(solved: Solved) -> float:
    """dμ/dE_MW at the most probable node: what μ gains when the Milky Way's E(B-V) is 1 mag higher."""
    system, model = solved.system, solved.data.model
    milky_way = np.array([model.mw_coefficients[band] for band in system.points.band.tolist()])
    db = -(system.design.T @ (system.whitener @ milky_way))
    i, j = solved.nodes.peak
    # where the prior holds host dust at zero, host dust cannot take up the change
    freedom = float(solved.nodes.e_var[i, j] / system.inverse[1, 1])
    de = min(freedom, 1.0) * float((system.inverse @ db)[1])
    return float((db[0] - system.normal[0, 1] * de) / system.normal[0, 0])


def _at_known_shape(system: System) -> tuple[float, float, float]:
    """Variances of μ from photometry, zero points and the supernova, at known dust, decline rate and t_max.

    The estimator's weights w = C⁻¹1 / (1ᵀC⁻¹1) give w C wᵀ = 1/A₁₁, which the parts of C share.
    """
    weights = system.whitener.T @ system.design[:, 0] / system.normal[0, 0]
    parts = (system.parts.photometry, system.parts.zero_points, system.parts.supernova)
    photometry, zero_points, supernova = (float(weights @ part @ weights) for part in parts)
    return photometry, zero_points, supernova


def budget(solved: Solved, target: Target, redshift_err: float | None) -> tuple[BudgetLine, ...]:
    """Lines of the budget.

    Parameters
    ----------
    redshift_err
        Error in mag that an unknown redshift leaves, None when the redshift is known.
    """
    photometry, zero_points, supernova = _at_known_shape(solved.system)
    slope = solved.system.normal[0, 1] / solved.system.normal[0, 0]
    host = float((solved.nodes.weight * slope**2 * solved.nodes.e_var).sum())
    whole = float(solved.cov[0, 0])
    shape = max(whole - photometry - zero_points - supernova - host, 0.0)
    # flux points make a node narrower than its magnitudes do; each part gives in proportion
    scale = math.sqrt(whole / (photometry + zero_points + supernova + host + shape))
    n_bands = len(solved.system.points.bands)
    lines = [
        BudgetLine("photometry", scale * math.sqrt(photometry), f"{len(solved.system)} points, {n_bands} bands"),
        BudgetLine("band zero points", scale * math.sqrt(zero_points), "shared by all nights"),
        BudgetLine("template and colour scatter", scale * math.sqrt(supernova), "supernovae of one Δm15 differ"),
        BudgetLine("host dust", scale * math.sqrt(host), "R_V = 1.79, without its own error"),
        BudgetLine("decline rate and time of maximum", scale * math.sqrt(shape)),
        _milky_way(solved, target),
    ]
    if redshift_err is not None:
        lines.append(BudgetLine("redshift unknown", redshift_err, "taken as 0; change of μ if it were 0.02"))
    lines.append(BudgetLine("intrinsic scatter", solved.data.model.scatter.grey, "the same in all bands"))
    return tuple(lines)


def _milky_way(solved: Solved, target: Target) -> BudgetLine:
    slope = abs(milky_way_slope(solved))
    if target.ebv_mw is None:
        note = f"E(B−V) unknown, not corrected; ±{UNKNOWN_EBV_ERROR} allowed"
        return BudgetLine("Milky Way dust", slope * UNKNOWN_EBV_ERROR, note)
    a_v = milky_way_extinction("V", target.ebv_mw, target.ebv_scale)
    note = f"E(B−V) {target.ebv_mw:.3f} ({target.ebv_scale}), A_V {a_v:.2f}, map good to 16 %"
    return BudgetLine("Milky Way dust", slope * RELATIVE_MAP_ERROR * solved.data.ebv_mw, note)
