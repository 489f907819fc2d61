"""The posterior of (t_max, Δm15, μ, host E): a grid over the first two, the others in closed form.

At a node r = y - M - T - K and the design [1, R_X] give, with A = XᵀC⁻¹X + diag(0, 1) and
b = XᵀC⁻¹r - (0, 1/τ), a normal in (μ, E) cut at E = 0. Limits and weak detections multiply every
node by their flux likelihood, expanded to second order about the most probable (μ, E).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, solve_triangular
from scipy.special import log_ndtr

from reduce.candles.covariance import Covariance, covariance, passband_error
from reduce.candles.distance import rest_phase
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel
from reduce.candles.points import MAG_PER_RELATIVE_FLUX, Points
from reduce.records import FLUX_ZERO_POINT, Floats

RISE_D = 18.0
"""Rest-frame days from explosion to B maximum (Ganeshalingam et al. 2011: 18.0; from memory)."""
LARGEST_FLUX_CHI2 = 25.0
"""Bound of one flux point's χ²: a bad subtraction must not outweigh the light curve."""
SUPPORT = 9.0
"""Nodes further than this below the peak in ln P are left out: exp(-9) = 1e-4."""
FURTHEST_D = 18.0
GRID = 31
FLUX_STEPS = 3
"""Steps towards the most probable (μ, E) of a node; the third moves μ by less than a mmag."""


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
class Quadratic:
    """-½ θᵀAθ + bᵀθ in θ = (μ, E) for every decline rate: the elements of A, shape (n,), and b, shape (2, n)."""

    mu_mu: Floats
    mu_e: Floats
    e_e: Floats
    linear: Floats

    @property
    def determinant(self) -> Floats:
        """Of A."""
        return self.mu_mu * self.e_e - self.mu_e**2

    @property
    def centre(self) -> Floats:
        """A⁻¹b, without the cut at E = 0."""
        b = self.linear
        top = np.array([self.e_e * b[0] - self.mu_e * b[1], self.mu_mu * b[1] - self.mu_e * b[0]])
        return np.asarray(top / self.determinant, float)

    def times(self, mu: Floats, e: Floats) -> Floats:
        """Aθ."""
        return np.array([self.mu_mu * mu + self.mu_e * e, self.mu_e * mu + self.e_e * e])

    def at(self, mu: Floats, e: Floats) -> Floats:
        """Its value."""
        theta = np.array([mu, e])
        return np.asarray((self.linear * theta).sum(0) - 0.5 * (theta * self.times(mu, e)).sum(0), float)


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


def _cut_normal(mean: Floats, sigma: Floats) -> tuple[Floats, Floats]:
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
    linear = system.design.T @ residual
    linear[1] -= 1.0 / prior.e_host_scale
    normal = [np.full(len(dm15), system.normal[i, j]) for i, j in ((0, 0), (0, 1), (1, 1))]
    node = Quadratic(normal[0], normal[1], normal[2], linear)
    ln_p = -0.5 * (residual**2).sum(0) + prior.ln_dm15(dm15)
    if len(data.fluxes):
        node, more = _with_fluxes(node, data, t_max, dm15)
        ln_p += more
    centre = node.centre
    sigma = np.sqrt(node.mu_mu / node.determinant)
    ln_p += 0.5 * (node.linear * centre).sum(0) + log_ndtr(centre[1] / sigma)
    e, e_var = _cut_normal(centre[1], sigma)
    slope = node.mu_e / node.mu_mu
    mu = node.linear[0] / node.mu_mu - slope * e
    return ln_p, mu, 1.0 / node.mu_mu + slope**2 * e_var, e, e_var, -slope * e_var


def _model_flux(data: Data, t_max: float, dm15: Floats) -> tuple[Floats, Floats, Floats]:
    """Flux at μ = 0 and E = 0, shape (flux point, Δm15); of each point the host coefficient and the relative error.

    The error is that of magnitude points: template and colour scatter, the nugget, what a night and a band share. A
    larger one would give points that scatter down to below S/N 5 less weight than those that scatter up.

    Before the first day of the model the flux grows with the square of the time since explosion (common
    practice).
    """
    points = data.fluxes
    phase = data.phase(points.mjd, t_max)
    held = np.maximum(phase, FIRST_PHASE)
    rise = np.clip((phase + RISE_D) / (FIRST_PHASE + RISE_D), 0.0, 1.0) ** 2
    model = data.model
    mag = model.standard_mags(points.bands, held, dm15, data.z)
    dust, colour = np.empty(len(points)), np.empty(len(points))
    for band, rows in points.bands:
        mag[rows] += model.mw_coefficients[band] * data.ebv_mw
        dust[rows] = model.host_coefficient(band, data.z)
        colour[rows] = model.scatter.colour[band]
    scatter = model.shape_scatter(points.bands, phase) ** 2 + colour**2 + model.scatter.nugget**2
    shared = points.err_night**2 + points.err_band**2 + passband_error(points, phase) ** 2
    err_mag = np.sqrt(scatter + shared)
    return 10.0 ** (-0.4 * (mag - FLUX_ZERO_POINT)) * rise[:, None], dust, err_mag / MAG_PER_RELATIVE_FLUX


def _with_fluxes(node: Quadratic, data: Data, t_max: float, dm15: Floats) -> tuple[Quadratic, Floats]:
    """Add the flux likelihood, expanded about the most probable (μ, E ≥ 0) of each node; and what ln P gains.

    A flux of mean p and variance 1 + (relative p)², in units of its measured error, is Gaussian in p; p falls by
    p / 1.0857 for each mag of μ + R E. Steps follow the expected curvature (Fisher scoring).
    """
    flux, dust, relative = _model_flux(data, t_max, dm15)
    bright = flux / data.fluxes.err[:, None]
    measured = (data.fluxes.value / data.fluxes.err)[:, None]
    r, rel2 = dust[:, None], relative[:, None] ** 2
    e = np.maximum(node.centre[1], 0.0)
    mu = (node.linear[0] - node.mu_e * e) / node.mu_mu
    for turn in range(FLUX_STEPS + 1):
        p = bright * np.exp(-(mu + r * e) / MAG_PER_RELATIVE_FLUX)
        variance = 1.0 + rel2 * p**2
        off = measured - p
        chi2 = off**2 / variance
        counts = (chi2 < LARGEST_FLUX_CHI2) * p / MAG_PER_RELATIVE_FLUX
        slope = -counts * (off + rel2 * p * (chi2 - 1.0)) / variance
        weight = counts**2 * (1.0 + 2.0 * rel2**2 * p**2 / variance) / variance
        grown = Quadratic(
            node.mu_mu + weight.sum(0), node.mu_e + (r * weight).sum(0), node.e_e + (r * r * weight).sum(0), node.linear
        )
        # the linear term that gives the sum of both the right slope here
        gain = np.array([slope.sum(0), (r * slope).sum(0)]) + grown.times(mu, e) - node.times(mu, e)
        grown = replace(grown, linear=node.linear + gain)
        if turn < FLUX_STEPS:
            e = np.maximum(grown.centre[1], 0.0)
            mu = mu + np.clip((grown.linear[0] - grown.mu_e * e) / grown.mu_mu - mu, -1.0, 1.0)
    here = -0.5 * (np.minimum(chi2, LARGEST_FLUX_CHI2) + np.log(variance)).sum(0)
    value = here + node.at(mu, e) - grown.at(mu, e)
    return grown, value - 0.5 * np.log(grown.determinant / node.determinant)


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
