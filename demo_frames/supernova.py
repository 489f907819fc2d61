"""The invented supernova: its parameters and its true light curve, from the model's own tables."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from demo_frames.scenario import Scenario
from reduce.candles.model import TypeIaModel, type_ia_model
from reduce.records import Floats

LIGHT_SPEED_KMS = 299792.458
HUBBLE_KMS_MPC = 73.04


@dataclass(frozen=True, slots=True)
class Supernova:
    """One supernova: ``scatter_mag`` is what it differs by from the model's mean, per band and night."""

    mu: float
    z: float
    t_max: float
    dm15: float
    e_host: float
    ebv_mw: float
    scatter_mag: Mapping[str, Floats] = field(default_factory=dict)

    def mag(self, band: str, mjd: float, night: int) -> float:
        """Apparent standard magnitude at ``mjd``.

        m = mu + M(D) + T(p, D) + K(z, p) + R(z) E_host + Rmw E_MW, and the scatter of that night.
        """
        model = type_ia_model()
        phase = np.array([(mjd - self.t_max) / (1.0 + self.z)])
        mag = float(model.standard_mag(band, phase, np.array([self.dm15]), self.z)[0, 0]) + self.mu
        mag += model.host_coefficient(band, self.z) * self.e_host + model.mw_coefficients[band] * self.ebv_mw
        return mag + (float(self.scatter_mag[band][night]) if self.scatter_mag else 0.0)


def draw_supernova(scenario: Scenario, seed: int, scatter: bool) -> Supernova:
    """Parameters inside the scenario's ranges; the redshift follows the Hubble law and a peculiar velocity."""
    rng = np.random.default_rng([seed, 1])
    scene = scenario.supernova
    mu = float(rng.uniform(*scene.mu))
    distance_mpc = 10.0 ** (0.2 * (mu - 25.0))
    velocity_kms = HUBBLE_KMS_MPC * distance_mpc + rng.normal(0.0, scene.peculiar_velocity_kms)
    z = round(velocity_kms / LIGHT_SPEED_KMS, 5)
    t_max = scene.t_max_mjd + float(rng.uniform(-1.0, 1.0)) * scene.t_max_spread_d
    dm15 = float(rng.uniform(*scene.dm15))
    e_host = float(rng.uniform(*scene.e_host))
    phases = (np.array([night.start_mjd for night in scenario.nights]) - t_max) / (1.0 + z)
    drawn = draw_scatter(type_ia_model(), tuple(scenario.bands), phases, rng) if scatter else {}
    return Supernova(mu, z, t_max, dm15, e_host, scene.ebv_mw, drawn)


def draw_scatter(
    model: TypeIaModel, bands: tuple[str, ...], phases: Floats, rng: np.random.Generator
) -> dict[str, Floats]:
    """Band → (nights,) mag: grey, one of each band, and template scatter correlated over phase and bands."""
    n = len(phases)
    sigma = np.concatenate([model.shape_scatter(((band, slice(0, n)),), phases) for band in bands])
    near = np.exp(-np.abs(phases[:, None] - phases[None, :]) / model.scatter.correlation_days)
    between = np.full((len(bands), len(bands)), model.scatter.between_bands)
    np.fill_diagonal(between, 1.0)
    # A product of two positive definite matrices in the sense of Kronecker has the product of their roots.
    root = np.kron(np.linalg.cholesky(between), np.linalg.cholesky(near))
    shape = (sigma * (root @ rng.normal(size=n * len(bands)))).reshape(len(bands), n)
    grey = rng.normal(0.0, model.scatter.grey)
    return {band: grey + rng.normal(0.0, model.scatter.colour[band]) + shape[k] for k, band in enumerate(bands)}
