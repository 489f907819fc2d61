"""The posterior of (t_max, Δm15, μ, host E): a grid over the first two, the others in closed form.

At a node r = y - M - T - K and the design [1, R_X] give, with A = XᵀC⁻¹X + diag(0, 1) and
b = XᵀC⁻¹r - (0, 1/τ), a normal in (μ, E) cut at E = 0. Limits and weak detections multiply every
node by their flux likelihood, integrated over μ.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, solve_triangular
from scipy.special import log_ndtr, logsumexp

from reduce.candles.covariance import Covariance, covariance
from reduce.candles.distance import rest_phase
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel
from reduce.candles.points import MAG_PER_RELATIVE_FLUX, Points
from reduce.records import FLUX_ZERO_POINT, Floats

RISE_D = 18.0
"""Rest-frame days from explosion to B maximum (Ganeshalingam et al. 2011: 18.0; from memory)."""
FLUX_SHAPE_ERROR = 0.1
"""Relative error of the model's flux where a limit or weak detection is compared with it."""
LARGEST_FLUX_CHI2 = 25.0
"""Bound of one flux point's χ²: a bad subtraction must not outweigh the light curve."""
SUPPORT = 9.0
"""Nodes further than this below the peak in ln P are left out: exp(-9) = 1e-4."""
FURTHEST_D = 18.0
GRID = 31
MU_STEPS = np.linspace(-4.5, 4.5, 25)
"""Where the integral over μ is taken, in standard deviations of its marginal at a node."""


@dataclass(frozen=True, slots=True)
class Data:
    """Input of a fit: magnitudes with the Milky Way's dust removed, fluxes as observed."""

    mags: Points
    fluxes: Points
    z: float
    ebv_mw: float
    """On the SF11 scale; 0 when nothing is corrected."""
    model: TypeIaModel

    def phase(self, mjd: Floats, t_max: float) -> Floats:
        """Rest-frame days since ``t_max``."""
        return rest_phase(mjd, t_max, self.z)

    def in_range(self, t_max: float) -> NDArray[np.bool_]:
        """Magnitude points inside the phases of the model."""
        phase = self.phase(self.mags.mjd, t_max)
        return (phase > FIRST_PHASE) & (phase < LAST_PHASE)


@dataclass(frozen=True, slots=True)
class System:
    """Everything that stays the same over the grid: points, covariance, design."""

    points: Points
    parts: Covariance
    dust: Floats
    """Host coefficient R_X of each point."""
    whitener: Floats
    """Inverse of the lower Cholesky factor of the covariance."""
    design: Floats
    """Whitened [1, R_X], shape (n, 2)."""
    normal: Floats
    """A, shape (2, 2)."""
    inverse: Floats

    def __len__(self) -> int:
        return len(self.points)


@dataclass(frozen=True, slots=True)
class Nodes:
    """Log probability and the moments of (μ, E) at grid nodes, shape (t_max, Δm15)."""

    t_max: Floats
    dm15: Floats
    ln_p: Floats
    mu: Floats
    mu_var: Floats
    e: Floats
    e_var: Floats
    mu_e: Floats
    """Covariance of μ and E within a node."""

    @property
    def peak(self) -> tuple[int, int]:
        """Indices of the most probable node."""
        i, j = np.unravel_index(int(np.argmax(self.ln_p)), self.ln_p.shape)
        return int(i), int(j)

    @property
    def weight(self) -> Floats:
        """Probability of each node, adding up to 1."""
        weight = np.exp(self.ln_p - self.ln_p.max())
        return np.asarray(weight / weight.sum(), float)


def system_at(data: Data, keep: NDArray[np.bool_], t_max: float) -> System:
    """The linear problem with the covariance that belongs to ``t_max``; ``keep`` is False for outliers."""
    points = data.mags.take(keep & data.in_range(t_max))
    parts = covariance(points, data.phase(points.mjd, t_max), data.model)
    factor = cholesky(parts.total, lower=True)
    whitener = np.asarray(solve_triangular(factor, np.eye(len(points)), lower=True), float)
    dust = np.empty(len(points))
    for band, rows in points.bands:
        dust[rows] = data.model.host_coefficient(band, data.z)
    design = whitener @ np.column_stack([np.ones(len(points)), dust])
    # the weak N(0, 1) on E keeps a single band solvable
    normal = design.T @ design + np.diag([0.0, 1.0])
    return System(points, parts, dust, whitener, design, normal, np.linalg.inv(normal))


def _cut_normal(mean: Floats, sigma: float) -> tuple[Floats, Floats]:
    """Mean and variance of a normal cut at zero."""
    t = mean / sigma
    hazard = np.exp(-0.5 * t**2 - 0.5 * np.log(2.0 * np.pi) - log_ndtr(t))
    return mean + sigma * hazard, np.maximum(sigma**2 * (1.0 - hazard * (hazard + t)), 1e-8)


def _row(system: System, data: Data, t_max: float, dm15: Floats) -> tuple[Floats, ...]:
    """ln P and the moments of (μ, E) at one t_max for all decline rates."""
    points, prior = system.points, data.model.prior
    phase = data.phase(points.mjd, t_max)
    shape = data.model.standard_mags(points.bands, phase, dm15, data.z)
    residual = system.whitener @ (points.value[:, None] - shape)
    b = system.design.T @ residual
    b[1] -= 1.0 / prior.e_host_scale
    centre = system.inverse @ b
    sigma = float(np.sqrt(system.inverse[1, 1]))
    ln_p = -0.5 * (residual**2).sum(0) + 0.5 * (b * centre).sum(0) + log_ndtr(centre[1] / sigma)
    ln_p += prior.ln_dm15(dm15)
    e, e_var = _cut_normal(centre[1], sigma)
    slope = system.normal[0, 1] / system.normal[0, 0]
    mu = b[0] / system.normal[0, 0] - slope * e
    mu_var = 1.0 / system.normal[0, 0] + slope**2 * e_var
    nodes = (ln_p, mu, mu_var, e, e_var, -slope * e_var)
    return _with_fluxes(system, data, t_max, dm15, centre, nodes) if len(data.fluxes) else nodes


def _model_flux(data: Data, t_max: float, dm15: Floats) -> tuple[Floats, Floats]:
    """Flux at μ = 0 and E = 0, shape (flux point, Δm15), and the host coefficient of each point.

    Before the first day of the model the flux grows with the square of the time since explosion (common
    practice).
    """
    points = data.fluxes
    phase = data.phase(points.mjd, t_max)
    held = np.maximum(phase, FIRST_PHASE)
    rise = np.clip((phase + RISE_D) / (FIRST_PHASE + RISE_D), 0.0, 1.0) ** 2
    mag = data.model.standard_mags(points.bands, held, dm15, data.z)
    dust = np.empty(len(points))
    for band, rows in points.bands:
        mag[rows] += data.model.mw_coefficients[band] * data.ebv_mw
        dust[rows] = data.model.host_coefficient(band, data.z)
    return 10.0 ** (-0.4 * (mag - FLUX_ZERO_POINT)) * rise[:, None], dust


def _with_fluxes(
    system: System, data: Data, t_max: float, dm15: Floats, centre: Floats, nodes: tuple[Floats, ...]
) -> tuple[Floats, ...]:
    """Multiply each node by the flux likelihood, integrated over μ with E at its conditional mean.

    ``centre`` is (μ̂, Ê) without the cut at E = 0, shape (2, Δm15).
    """
    ln_p, mu, mu_var = nodes[:3]
    trial_mu = mu[:, None] + np.sqrt(mu_var)[:, None] * MU_STEPS[None, :]
    off = trial_mu - centre[0][:, None]
    v = system.inverse
    sigma_e = float(np.sqrt(v[1, 1] - v[0, 1] ** 2 / v[0, 0]))
    e_centre = centre[1][:, None] + v[0, 1] / v[0, 0] * off
    trial_e, trial_e_var = _cut_normal(e_centre, sigma_e)
    trial_e = np.maximum(trial_e, 0.0)
    before = -0.5 * off**2 / v[0, 0] + log_ndtr(e_centre / sigma_e)

    flux, dust = _model_flux(data, t_max, dm15)
    dimming = trial_mu[None] + dust[:, None, None] * trial_e[None]
    predicted = flux[:, :, None] * 10.0 ** (-0.4 * dimming)
    shared = np.hypot(data.fluxes.err_band, data.fluxes.err_night) / MAG_PER_RELATIVE_FLUX
    relative = np.hypot(FLUX_SHAPE_ERROR, shared)[:, None, None]
    variance = data.fluxes.err[:, None, None] ** 2 + (relative * predicted) ** 2
    chi2 = np.minimum((data.fluxes.value[:, None, None] - predicted) ** 2 / variance, LARGEST_FLUX_CHI2)
    spread = np.log(variance / data.fluxes.err[:, None, None] ** 2)
    after = before - 0.5 * (chi2 + spread).sum(0)

    weight = np.exp(after - after.max(axis=1, keepdims=True))
    weight /= weight.sum(axis=1, keepdims=True)
    new_mu, new_e = (weight * trial_mu).sum(axis=1), (weight * trial_e).sum(axis=1)
    mu_off, e_off = trial_mu - new_mu[:, None], trial_e - new_e[:, None]
    return (
        ln_p + logsumexp(after, axis=1) - logsumexp(before, axis=1),
        new_mu,
        np.maximum((weight * mu_off**2).sum(axis=1), 1e-8),
        new_e,
        np.maximum((weight * (e_off**2 + trial_e_var)).sum(axis=1), 1e-8),
        (weight * mu_off * e_off).sum(axis=1),
    )


def evaluate(system: System, data: Data, t_max: Floats, dm15: Floats) -> Nodes:
    """All nodes of a grid."""
    rows = [_row(system, data, float(t), dm15) for t in t_max]
    columns = [np.array([np.broadcast_to(row[i], dm15.shape) for row in rows]) for i in range(6)]
    return Nodes(t_max, dm15, *columns)


def residuals(system: System, data: Data, t_max: float, dm15: float, mu: float, e: float) -> Floats:
    """Observed minus model in mag of the points of ``system``."""
    phase = data.phase(system.points.mjd, t_max)
    shape = data.model.standard_mags(system.points.bands, phase, np.array([dm15]), data.z)[:, 0]
    return np.asarray(system.points.value - shape - mu - system.dust * e, float)


def _limits(axis: Floats, used: NDArray[np.bool_]) -> tuple[float, float, bool, bool]:
    """Ends of the used part of an axis with one step of margin, and whether it touches either end."""
    inside = np.flatnonzero(used)
    step = float(axis[1] - axis[0])
    low, high = float(axis[inside[0]]) - step, float(axis[inside[-1]]) + step
    return low, high, bool(used[0]), bool(used[-1])


def explore(system: System, data: Data, t_start: float) -> Nodes:
    """The posterior on a grid that covers everything within exp(-9) of its peak, in both parameters."""
    low, high = data.model.prior.dm15_range
    d_low, d_high = low, high
    t_low, t_high = t_start - 3.0, t_start + 3.0
    earliest, latest = t_start - FURTHEST_D, t_start + FURTHEST_D
    for _ in range(10):
        coarse = evaluate(system, data, np.linspace(t_low, t_high, 17), np.linspace(d_low, d_high, 15))
        used = coarse.ln_p > coarse.ln_p.max() - SUPPORT
        t_from, t_to, at_first, at_last = _limits(coarse.t_max, used.any(axis=1))
        d_from, d_to, d_first, d_last = _limits(coarse.dm15, used.any(axis=0))
        grow_low, grow_high = at_first and t_low > earliest, at_last and t_high < latest
        grow_d = (d_first and d_low > low) or (d_last and d_high < high)
        fine = used.any(axis=1).sum() >= 8 and used.any(axis=0).sum() >= 7
        if fine and not (grow_low or grow_high or grow_d):
            break
        width = t_to - t_from
        t_low = max(t_from - (0.5 * width if grow_low else 0.0), earliest)
        t_high = min(t_to + (0.5 * width if grow_high else 0.0), latest)
        d_margin = 0.25 * (d_to - d_from)
        d_low = max(d_from - (d_margin if d_first else 0.0), low)
        d_high = min(d_to + (d_margin if d_last else 0.0), high)
    d_from, d_to = max(d_from, low), min(d_to, high)
    return evaluate(
        system,
        data,
        np.linspace(max(t_from, earliest), min(t_to, latest), GRID),
        np.linspace(d_from, d_to, GRID),
    )
