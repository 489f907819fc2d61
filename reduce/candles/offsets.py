"""Zero-point offsets of other observatories: fitted with a prior, that is, marginalised in the covariance."""

from __future__ import annotations

import numpy as np

from reduce.candles.solve import Solved
from reduce.records import SourceOffset


def source_offsets(solved: Solved) -> tuple[SourceOffset, ...]:
    """Offset of each band of each source beside the other points, at the most probable node.

    With the offset o ~ N(0, s²) inside C, k = cov(y, o) and P = C⁻¹ - C⁻¹X A⁻¹ XᵀC⁻¹ (μ and host dust free):
    o = kᵀ C⁻¹ r with variance s² - kᵀ P k.
    """
    system = solved.system
    points = system.points
    if len(set(points.source.tolist())) < 2:
        return ()
    white_residual = system.whitener @ solved.residual
    found = []
    for source, band in sorted(set(zip(points.source.tolist(), points.band.tolist(), strict=True))):
        mine = (points.source == source) & (points.band == band)
        if not source:
            continue
        prior = float(np.max(points.err_band[mine]))
        white = system.whitener @ np.where(mine, prior * points.err_band, 0.0)
        seen = white @ system.design
        variance = prior**2 - float(white @ white - seen @ system.inverse @ seen)
        found.append(
            SourceOffset(
                source, band, float(white @ white_residual), float(np.sqrt(max(variance, 0.0))), prior, int(mine.sum())
            )
        )
    return tuple(found)
