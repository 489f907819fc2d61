"""The fitted model as curves and residuals, for looking at."""

from __future__ import annotations

import numpy as np

from reduce.candles.distance import rest_phase
from reduce.candles.solve import Solved
from reduce.records import FitCurve, FitPoint

FIRST_DRAWN, LAST_DRAWN = -14.0, 70.0
MARGIN_D = 12.0
"""Curves end this long before the first and after the last point."""
N_DRAWN = 200
T_STEP, DM15_STEP = 0.2, 0.02


def fit_curves(solved: Solved) -> tuple[FitCurve, ...]:
    """One curve a fitted band, with the error of where a perfect point would fall.

    The error is that of the parameters carried through the model, and the scatter of supernovae about it.
    """
    data, model = solved.data, solved.data.model
    mu, e, t_max, dm15 = (float(value) for value in solved.mean)
    mjd = data.mags.mjd
    first = max(FIRST_DRAWN, float(rest_phase(mjd.min() - MARGIN_D, t_max, data.z)))
    last = min(LAST_DRAWN, float(rest_phase(mjd.max() + MARGIN_D, t_max, data.z)))
    if last <= first:
        return ()
    phase = np.linspace(first, last, N_DRAWN)
    low, high = model.prior.dm15_range
    d_low, d_high = max(dm15 - DM15_STEP, low), min(dm15 + DM15_STEP, high)
    step = T_STEP / (1.0 + data.z)
    curves = []
    for band, _ in solved.system.points.bands:
        dust = model.host_coefficient(band, data.z)
        shape = model.standard_mag(band, phase, np.array([d_low, dm15, d_high]), data.z)
        by_dm15 = (shape[:, 2] - shape[:, 0]) / (d_high - d_low)
        one = np.array([dm15])
        later = model.standard_mag(band, phase - step, one, data.z)[:, 0]
        sooner = model.standard_mag(band, phase + step, one, data.z)[:, 0]
        slope = np.column_stack([np.ones(N_DRAWN), np.full(N_DRAWN, dust), (later - sooner) / (2.0 * T_STEP), by_dm15])
        variance = np.einsum("ia,ab,ib->i", slope, solved.cov, slope)
        variance += model.shape_scatter(((band, slice(0, N_DRAWN)),), phase) ** 2 + model.scatter.colour[band] ** 2
        mag = shape[:, 1] + mu + dust * e + model.mw_coefficients[band] * data.ebv_mw
        curves.append(FitCurve(band, t_max + phase * (1.0 + data.z), mag, np.sqrt(variance)))
    return tuple(curves)


def peak_mags(solved: Solved) -> dict[str, float]:
    """Fitted apparent magnitude of each band at B maximum, as observed."""
    data, model = solved.data, solved.data.model
    mu, e, _, dm15 = (float(value) for value in solved.mean)
    peak = {}
    for band, _ in solved.system.points.bands:
        shape = model.standard_mag(band, np.array([0.0]), np.array([dm15]), data.z)[0, 0]
        dust = model.host_coefficient(band, data.z) * e + model.mw_coefficients[band] * data.ebv_mw
        peak[band] = float(shape + mu + dust)
    return peak


def fit_points(solved: Solved) -> tuple[FitPoint, ...]:
    """Every magnitude point inside the range of the model, in order of time; outliers are marked."""
    data, model = solved.data, solved.data.model
    mu, e, t_max, dm15 = (float(value) for value in solved.mean)
    inside = data.in_range(t_max)
    points = data.mags.take(inside)
    rejected = ~solved.keep[inside]
    phase = data.phase(points.mjd, t_max)
    shape = model.standard_mags(points.bands, phase, np.array([dm15]), data.z)[:, 0]
    dust = np.array([model.host_coefficient(band, data.z) for band in points.band.tolist()])
    residual = points.value - shape - mu - dust * e
    colour = np.array([model.scatter.colour[band] for band in points.band.tolist()])
    scatter = model.shape_scatter(points.bands, phase)
    sigma = np.sqrt(
        points.err**2 + model.scatter.nugget**2 + points.err_night**2 + points.err_band**2
        + scatter**2 + colour**2
    )  # fmt: skip
    order = np.argsort(points.mjd, kind="stable")
    return tuple(
        FitPoint(
            str(points.night[i]), str(points.band[i]), float(points.mjd[i]), float(phase[i]),
            float(residual[i]), float(sigma[i]), bool(rejected[i]),
        )
        for i in order
    )  # fmt: skip
