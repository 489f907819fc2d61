"""A pulsating star's light curve against phase: two cycles, so that the eye sees the whole wave."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from tui.band_look import band_colour
from tui.widgets.raster import Line

if TYPE_CHECKING:
    from reduce.records import FitCurve, Point, Pulsation

JD_OF_MJD_0 = 2400000.5
MOST_CYCLES_IN_TIME = 15
"""More cycles than this are only a hatching on a screen; the curve is then drawn folded alone."""


def phase_of(point: Point, star: Pulsation) -> float:
    """Fraction of the period since maximum light, 0 to 1."""
    time = point.mjd + JD_OF_MJD_0 if point.bjd_tdb is None else point.bjd_tdb
    return (time - star.epoch_bjd) / star.period_d % 1.0


def folded_lines(curves: Sequence[FitCurve], with_sigma: bool) -> list[Line]:
    """The fitted cycle of each band, twice."""
    lines = []
    for curve in curves:
        phase = np.linspace(0.0, 1.0, len(curve.mjd))
        sigma = np.concatenate([curve.sigma_mag, curve.sigma_mag]) if with_sigma else None
        lines.append(
            Line(
                band_colour(curve.band),
                np.concatenate([phase, phase + 1.0]),
                np.concatenate([curve.mag, curve.mag]),
                sigma,
            )
        )
    return lines


def repeated_lines(curves: Sequence[FitCurve], points: Sequence[Point], period_d: float) -> list[Line]:
    """The fitted cycle over and over from the first point to the last; nothing when the cycles are too many."""
    if not points:
        return []
    first, last = min(point.mjd for point in points), max(point.mjd for point in points)
    if last - first > MOST_CYCLES_IN_TIME * period_d:
        return []
    lines = []
    for curve in curves:
        numbers = np.arange(np.floor((first - curve.mjd[0]) / period_d), np.ceil((last - curve.mjd[0]) / period_d))
        times = (curve.mjd[None, :] + period_d * numbers[:, None]).ravel()
        inside = (times >= first) & (times <= last)
        lines.append(Line(band_colour(curve.band), times[inside], np.tile(curve.mag, len(numbers))[inside], None))
    return lines
