"""Distance of a type Ia supernova from its light curve (decline-rate relation: Phillips 1993, 1999)."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from reduce.candles.budget import budget, total_error
from reduce.candles.cautions import cautions, input_cautions
from reduce.candles.distance import MODEL_H0, h0_magnitude_shift
from reduce.candles.drawing import fit_curves, fit_points, peak_mags
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel, type_ia_model
from reduce.candles.points import LEAST_SNR, select
from reduce.candles.posterior import Data
from reduce.candles.reddening import to_sf11
from reduce.candles.search import LEAST_POINTS
from reduce.candles.solve import Solved, separate_maxima, solve
from reduce.records import Estimate, LightCurve, Target

LARGEST_FIT_ERROR = 0.3
"""Beyond it the posterior has several peaks or no shape: no distance is quoted."""
HOPELESS_CHI2 = 20.0
"""χ² per point from which nothing about the fit can be believed."""
LARGEST_T_MAX_ERROR_BEFORE = 2.0
"""Days; a maximum that is still to come must be known this well."""
OTHER_Z = 0.02
NO_RISE_T_MAX_ERROR_D = 0.5
"""Added in quadrature to the error of t_max when no point precedes maximum, rest-frame days.

Measured on 131 supernovae of the public nearby samples whose light curves were cut to begin at 0 to +20 d:
t_max differed from that of the whole light curve by 1.2 to 1.6 times its formal error, an excess of 0.4 to
0.8 d.
"""


def fit(curve: LightCurve, target: Target, *, h0: float = MODEL_H0) -> Estimate:
    """Fit time of maximum, decline rate, host dust and distance modulus, without a starting guess.

    Parameters
    ----------
    curve
        Standard-system points, not dereddened, observer's frame.
    target
        Gives redshift and Milky Way reddening; unknown ones are named in the warnings, never taken as known.
    h0
        Scale of μ, km/s/Mpc.

    Returns
    -------
    Estimate
        ``mu`` is None when the data cannot tell yet and ``verdict`` says why.
    """
    model = type_ia_model()
    scale = _scale(h0)
    data = _data(curve, target, model)
    if len(data.mags) < LEAST_POINTS:
        why = (
            f"cannot tell yet: {len(data.mags)} usable points with S/N of {LEAST_SNR:.0f} or more in "
            f"{' '.join(model.bands)}, at least {LEAST_POINTS} are needed."
        )
        return _nothing(curve, target, why, scale, model)
    solved = solve(data)
    if solved is None:
        why = (
            f"cannot tell: fewer than {LEAST_POINTS} points lie within {FIRST_PHASE:.0f} to "
            f"+{LAST_PHASE:.0f} d of any maximum, or all were rejected."
        )
        return _nothing(curve, target, why, scale, model)
    return _estimate(curve, target, solved, h0)


def _data(curve: LightCurve, target: Target, model: TypeIaModel) -> Data:
    ebv = 0.0 if target.ebv_mw is None else to_sf11(target.ebv_mw, target.ebv_scale)
    mags, fluxes = select(curve, model)
    dust = np.array([model.mw_coefficients[band] for band in mags.band.tolist()])
    return Data(replace(mags, value=mags.value - dust * ebv), fluxes, target.z or 0.0, ebv, model)


def _scale(h0: float) -> str:
    if h0 == MODEL_H0:
        return f"H0 = {h0:.2f} km/s/Mpc (Cepheid anchor of the model)"
    shift = h0_magnitude_shift(h0, MODEL_H0)
    return f"H0 = {h0:.2f} km/s/Mpc (μ moved by {shift:+.3f} mag from the model's {MODEL_H0})"


def _nothing(curve: LightCurve, target: Target, why: str, scale: str, model: TypeIaModel) -> Estimate:
    return Estimate(
        target=target.name, kind="type_ia", mu=None, mu_err=None, mu_err_fit=None, t_max=None, t_max_err=None,
        dm15=None, dm15_err=None, e_host=None, e_host_err=None, chi2=None, n=0, verdict=why, scale=scale,
        warnings=tuple(input_cautions(curve, target, model.bands)),
    )  # fmt: skip


def _why_not(solved: Solved) -> str | None:
    """The sentence that withholds μ, or None when it can be quoted."""
    sigma, t_err = float(solved.err[0]), float(solved.err[2])
    maxima = separate_maxima(solved.nodes)
    last = float(solved.system.points.mjd.max())
    t_max = float(solved.mean[2])
    per_point = solved.chi2 / len(solved.system)
    if per_point > HOPELESS_CHI2:
        return f"cannot tell: no normal type Ia varies like this (χ² is {per_point:.0f} per point)."
    if len(maxima) > 1:
        times = " and ".join(f"{time:.1f}" for time in sorted(maxima[:2]))
        return f"cannot tell yet: maximum light at MJD {times} both fit the points."
    if t_max > last and t_err > LARGEST_T_MAX_ERROR_BEFORE:
        return f"cannot tell yet: maximum is still to come, about MJD {t_max:.0f} ± {t_err:.1f}."
    if sigma > LARGEST_FIT_ERROR:
        return f"cannot tell yet: the points leave μ uncertain by {sigma:.2f} mag."
    return None


def _redshift_error(solved: Solved, target: Target) -> float | None:
    """Change of μ if an unknown redshift were 0.02 instead of 0 (K-correction and time dilation)."""
    if target.z is not None:
        return None
    other = solve(replace(solved.data, z=OTHER_Z))
    return LARGEST_FIT_ERROR if other is None else abs(float(other.mean[0] - solved.mean[0]))


def _estimate(curve: LightCurve, target: Target, solved: Solved, h0: float) -> Estimate:
    mu, e, t_max, dm15 = (float(value) for value in solved.mean)
    _, e_err, t_err, dm15_err = (float(value) for value in solved.err)
    if solved.system.points.mjd.min() > t_max:
        t_err = math.hypot(t_err, NO_RISE_T_MAX_ERROR_D * (1.0 + solved.data.z))
    why = _why_not(solved)
    estimate = Estimate(
        target=target.name, kind="type_ia", mu=None, mu_err=None, mu_err_fit=None,
        t_max=t_max, t_max_err=t_err,
        dm15=dm15, dm15_err=dm15_err, e_host=e, e_host_err=e_err, chi2=solved.chi2, n=len(solved.system),
        verdict=why or "μ stands", scale=_scale(h0), warnings=cautions(curve, target, solved),
        curves=fit_curves(solved), points=fit_points(solved), peak_mag=peak_mags(solved),
    )  # fmt: skip
    if why is not None:
        return estimate
    lines = budget(solved, target, _redshift_error(solved, target))
    whole = total_error(lines)
    without_grey = total_error(line for line in lines if line.component != "intrinsic scatter")
    shifted = mu + h0_magnitude_shift(h0, MODEL_H0)
    return replace(estimate, mu=shifted, mu_err=whole, mu_err_fit=without_grey, budget=lines)
