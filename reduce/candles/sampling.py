"""Draws from the posterior of a type Ia fit, and the quantiles and correlations that are kept of it."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import log_ndtr, ndtri_exp

from reduce.candles.posterior import Nodes
from reduce.candles.solve import Solved
from reduce.records import Floats, Posterior

PARAMETERS = ("mu", "e_host", "t_max", "dm15")
PROBABILITIES = (0.025, 0.16, 0.5, 0.84, 0.975)
N_FOR_QUANTILES = 4096
SEED = 20110
"""Of the generator behind quantiles, so that equal light curves give equal ones."""
_CUTS = np.linspace(-12.0, 12.0, 481)


def _cut_normal_of(mean: Floats, variance: Floats) -> tuple[Floats, Floats]:
    """Centre and σ of the normal that has this mean and variance once it is cut at zero."""
    hazard = np.exp(-0.5 * _CUTS**2 - 0.5 * math.log(2.0 * math.pi) - log_ndtr(_CUTS))
    ratio = (_CUTS + hazard) / np.sqrt(1.0 - hazard * (hazard + _CUTS))
    wanted = mean / np.sqrt(variance)
    t = np.where(wanted > ratio[-1], wanted, np.interp(wanted, ratio, _CUTS))
    sigma = mean / (t + np.exp(-0.5 * t**2 - 0.5 * math.log(2.0 * math.pi) - log_ndtr(t)))
    return t * sigma, sigma


def draw(nodes: Nodes, n: int, generator: np.random.Generator) -> Floats:
    """(n, 4) draws of ``PARAMETERS`` on the model's scale, in random order; without the errors outside the fit."""
    edges = np.cumsum(nodes.weight.ravel())
    # one draw from each n-th of the probability: the nodes get their share with less noise than by chance
    places = (np.arange(n) + generator.random(n)) / n * edges[-1]
    which = np.minimum(np.searchsorted(edges, places, "right"), len(edges) - 1)
    i, j = np.unravel_index(which, nodes.ln_p.shape)
    mean, variance = nodes.e[i, j], nodes.e_var[i, j]
    centre, sigma = _cut_normal_of(mean, variance)
    e = centre - sigma * ndtri_exp(np.log1p(-generator.random(n)) + log_ndtr(centre / sigma))
    slope = nodes.mu_e[i, j] / variance
    rest = np.sqrt(np.maximum(nodes.mu_var[i, j] - slope**2 * variance, 0.0))
    mu = nodes.mu[i, j] + slope * (e - mean) + rest * generator.standard_normal(n)
    t_max = _within_step(nodes.t_max, i, generator)
    dm15 = _within_step(nodes.dm15, j, generator)
    return generator.permutation(np.column_stack([mu, np.maximum(e, 0.0), t_max, dm15]))


def _within_step(axis: Floats, which: np.ndarray, generator: np.random.Generator) -> Floats:
    """A draw from anywhere in the step of a node, inside the grid."""
    step = float(axis[1] - axis[0])
    found = axis[which] + step * (generator.random(len(which)) - 0.5)
    return np.asarray(np.clip(found, axis[0], axis[-1]), float)


def draw_with_all_errors(
    solved: Solved, n: int, generator: np.random.Generator, shift_mag: float, mu_err_outside: float
) -> Floats:
    """(n, 4) draws with what the light curve does not know of: ``mu_err_outside`` in mag, and the clock's error."""
    found = draw(solved.nodes, n, generator)
    found[:, 0] += shift_mag + mu_err_outside * generator.standard_normal(n)
    found[:, 2] += solved.clock_err_d * generator.standard_normal(n)
    return found


def posterior(solved: Solved, shift_mag: float, mu_err_outside: float) -> Posterior:
    """Quantiles and correlations, the errors outside the fit included."""
    generator = np.random.default_rng(SEED)
    found = draw_with_all_errors(solved, N_FOR_QUANTILES, generator, shift_mag, mu_err_outside)
    quantiles = np.quantile(found, PROBABILITIES, axis=0).T
    cov = solved.cov.copy()
    cov[0, 0] += mu_err_outside**2
    sigma = np.sqrt(np.diag(cov))
    correlation = cov / np.outer(sigma, sigma)
    return Posterior(PARAMETERS, PROBABILITIES, _rows(quantiles), _rows(correlation))


def _rows(table: Floats) -> tuple[tuple[float, ...], ...]:
    return tuple(tuple(float(value) for value in row) for row in table)
