"""One modulus from several indicators of a galaxy, with the errors that they share as covariance."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

LARGEST_PULL = 3.0


@dataclass(frozen=True, slots=True)
class Indicator:
    """One modulus with the error that is its own, and its signed part of each shared error (mag)."""

    name: str
    mu: float
    err: float
    shared: Mapping[str, float] = field(default_factory=dict)
    """Name of a shared error → how far this modulus moves when that error is 1 σ."""


@dataclass(frozen=True, slots=True)
class Combined:
    """The generalised least-squares mean."""

    mu: float
    err: float
    err_own: float
    """Part of ``err`` that comes of the errors of each indicator alone."""
    err_shared: float
    err_scaled: float
    """``err`` with the part that is their own widened by √(χ²/dof), where the indicators disagree."""
    chi2: float
    dof: int
    weights: tuple[float, ...]
    pulls: tuple[float, ...]
    """Of each indicator from the mean, in units of the error of that difference."""
    notes: tuple[str, ...]


def combined(indicators: Sequence[Indicator]) -> Combined:
    """μ = (1ᵀC⁻¹μ) / (1ᵀC⁻¹1) with C = diag(err²) + Σ_k v_k v_kᵀ, one v_k for each shared error.

    An error that all share alike moves the mean as a whole: it is in the error once, and never averages down.

    Raises
    ------
    ValueError
        No indicator, or an error that is not positive.
    """
    if not indicators or not all(indicator.err > 0 for indicator in indicators):
        raise ValueError("a mean needs indicators with errors above 0")
    mu = np.array([indicator.mu for indicator in indicators])
    own = np.diag([indicator.err**2 for indicator in indicators])
    names = sorted({name for indicator in indicators for name in indicator.shared})
    parts = np.array([[indicator.shared.get(name, 0.0) for name in names] for indicator in indicators])
    cov = own + parts @ parts.T
    inverse = np.linalg.inv(cov)
    weights = inverse.sum(axis=0) / inverse.sum()
    mean = float(weights @ mu)
    left = mu - mean
    chi2, dof = float(left @ inverse @ left), len(mu) - 1
    own_variance, shared_variance = float(weights @ own @ weights), float(((weights @ parts) ** 2).sum())
    difference = np.eye(len(mu)) - weights[None, :]
    spread = np.sqrt(np.maximum(np.diag(difference @ cov @ difference.T), 1e-12))
    pulls = left / spread if dof else np.zeros(1)
    widening = max(chi2 / dof, 1.0) if dof else 1.0
    notes = [
        f"{indicator.name} is {abs(pull):.1f} σ from the mean of all."
        for indicator, pull in zip(indicators, pulls.tolist(), strict=True)
        if abs(pull) > LARGEST_PULL
    ]
    notes += [
        f"{indicator.name} has a negative weight: it shares more of its error than it has of its own."
        for indicator, weight in zip(indicators, weights.tolist(), strict=True)
        if weight < 0
    ]
    if not names:
        notes.append("no shared error is given: moduli of one ladder, anchor or dust map are not independent.")
    return Combined(
        mean, float(np.sqrt(own_variance + shared_variance)), float(np.sqrt(own_variance)),
        float(np.sqrt(shared_variance)), float(np.sqrt(own_variance * widening + shared_variance)), chi2, dof,
        tuple(weights.tolist()), tuple(pulls.tolist()), tuple(notes),
    )  # fmt: skip
