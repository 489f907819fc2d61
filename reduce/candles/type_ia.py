"""Distance of a type Ia supernova from its light curve (decline-rate relation: Phillips 1993, 1999)."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from reduce.candles.assumptions import Assumptions
from reduce.candles.budget import budget, total_error
from reduce.candles.cautions import cautions, input_cautions, prior_sentences
from reduce.candles.drawing import fit_curves, fit_points, peak_mags
from reduce.candles.hubble import hubble_expectation
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel, type_ia_model
from reduce.candles.offsets import source_offsets
from reduce.candles.points import LEAST_SNR, select
from reduce.candles.posterior import Data
from reduce.candles.reddening import to_sf11
from reduce.candles.sampling import draw_with_all_errors, posterior
from reduce.candles.search import LEAST_POINTS
from reduce.candles.solve import Solved, separate_maxima, solve
from reduce.records import BudgetLine, Estimate, Floats, LightCurve, Target

MODEL_ASSUMPTIONS = Assumptions()
LARGEST_FIT_ERROR = 0.3
"""Beyond it the posterior has several peaks or no shape: no distance is quoted."""
HOPELESS_CHI2 = 20.0
"""χ² per point from which nothing about the fit can be believed."""
LARGEST_T_MAX_ERROR_BEFORE = 2.0
"""Days; a maximum that is still to come must be known this well."""
OTHER_Z = 0.02


def fit(curve: LightCurve, target: Target, assumptions: Assumptions = MODEL_ASSUMPTIONS) -> Estimate:
    """Fit time of maximum, decline rate, host dust and distance modulus, without a starting guess.

    Parameters
    ----------
    curve
        Standard-system points, not dereddened, observer's frame.
    target
        Gives redshift and Milky Way reddening; unknown ones are named in the warnings, never taken as known.
    assumptions
        The absolute scale of μ, and priors to do without.

    Returns
    -------
    Estimate
        ``mu`` is None when the data cannot tell yet and ``verdict`` says why.
    """
    model = type_ia_model().without(assumptions.without)
    data = _data(curve, target, model, assumptions)
    context = _Context(curve, target, model, assumptions)
    if len(data.mags) < LEAST_POINTS:
        return context.estimate(
            f"cannot tell yet: {len(data.mags)} usable points with S/N of {LEAST_SNR:.0f} or more in "
            f"{' '.join(model.bands)}, at least {LEAST_POINTS} are needed."
        )
    solved = solve(data)
    if solved is None:
        return context.estimate(
            f"cannot tell: fewer than {LEAST_POINTS} points lie within {FIRST_PHASE:.0f} to "
            f"+{LAST_PHASE:.0f} d of any maximum, or all were rejected."
        )
    return _estimate(context, solved)


def draws(
    curve: LightCurve,
    target: Target,
    n: int,
    generator: np.random.Generator,
    assumptions: Assumptions = MODEL_ASSUMPTIONS,
) -> Floats | None:
    """(n, 4) draws of (μ, host E, t_max, Δm15) from the posterior with all errors; None where μ is withheld."""
    model = type_ia_model().without(assumptions.without)
    data = _data(curve, target, model, assumptions)
    solved = solve(data) if len(data.mags) >= LEAST_POINTS else None
    if solved is None or _why_not(solved) is not None:
        return None
    outside = _error_outside(solved, budget(solved, target, _redshift_error(solved, target)))
    return draw_with_all_errors(solved, n, generator, assumptions.shift_mag, outside)


def _data(curve: LightCurve, target: Target, model: TypeIaModel, assumptions: Assumptions) -> Data:
    ebv = 0.0 if target.ebv_mw is None else to_sf11(target.ebv_mw, target.ebv_scale)
    mags, fluxes = select(curve, model, offset_prior="offsets" not in assumptions.without)
    dust = np.array([model.mw_coefficients[band] for band in mags.band.tolist()])
    return Data(replace(mags, value=mags.value - dust * ebv), fluxes, target.z or 0.0, ebv, model)


@dataclass(frozen=True, slots=True)
class _Context:
    """What an estimate says whether or not there is a fit."""

    curve: LightCurve
    target: Target
    model: TypeIaModel
    assumptions: Assumptions

    def estimate(self, verdict: str) -> Estimate:
        """Without any fit."""
        return Estimate(
            target=self.target.name, kind="type_ia", mu=None, mu_err=None, mu_err_fit=None, t_max=None, t_max_err=None,
            dm15=None, dm15_err=None, e_host=None, e_host_err=None, chi2=None, n=0, verdict=verdict,
            scale=self.assumptions.scale, warnings=tuple(input_cautions(self.curve, self.target, self.model.bands)),
            priors=prior_sentences(self.model, self.assumptions),
            hubble=hubble_expectation(self.target, self.assumptions),
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


def _error_outside(solved: Solved, lines: Sequence[BudgetLine]) -> float:
    """What the budget holds beyond the covariance of the fit, mag."""
    return math.sqrt(max(total_error(lines) ** 2 - float(solved.cov[0, 0]), 0.0))


def _estimate(context: _Context, solved: Solved) -> Estimate:
    target, assumptions = context.target, context.assumptions
    mu, e, t_max, dm15 = (float(value) for value in solved.mean)
    _, e_err, t_err, dm15_err = (float(value) for value in solved.err)
    why = _why_not(solved)
    lines = budget(solved, target, _redshift_error(solved, target))
    whole = total_error(lines)
    said = cautions(context.curve, target, solved, whole)
    stands = "μ is in doubt: this may be no normal type Ia." if any(c.doubts_type for c in said) else "μ stands"
    estimate = replace(
        context.estimate(why or stands), t_max=t_max, t_max_err=t_err, dm15=dm15, dm15_err=dm15_err, e_host=e,
        e_host_err=e_err, chi2=solved.chi2, n=len(solved.system),
        warnings=said, curves=fit_curves(solved), points=fit_points(solved),
        peak_mag=peak_mags(solved), offsets=source_offsets(solved),
    )  # fmt: skip
    if why is not None:
        return estimate
    without_grey = total_error(line for line in lines if line.component != "intrinsic scatter")
    return replace(
        estimate, mu=mu + assumptions.shift_mag, mu_err=whole, mu_err_fit=without_grey, budget=lines,
        posterior=posterior(solved, assumptions.shift_mag, _error_outside(solved, lines)),
    )  # fmt: skip
