"""What a type Ia distance stands on beside its light curve: the absolute scale, and priors that can be switched off."""

from __future__ import annotations

from dataclasses import dataclass

from reduce.candles.distance import MODEL_H0, h0_magnitude_shift

MODEL_M_B = -19.2443
"""M_B of the model at maximum for Δm15 = 1.1 without host dust: a coefficient of ``tables/type_ia_params.json``."""
MODEL_H0_ERR = 1.04
"""km/s/Mpc (Riess et al. 2022, ApJ 934, L7)."""
PRIORS = ("dust", "dm15", "grey", "offsets")
"""Names of what a fit assumes: host dust, decline rate, scatter of all bands together, others' zero points."""


@dataclass(frozen=True, slots=True)
class Assumptions:
    """The model's own ones by default."""

    h0: float = MODEL_H0
    """Scale of μ, km/s/Mpc."""
    m_b: float | None = None
    """A calibrated M_B at maximum for Δm15 = 1.1 without host dust; then ``h0`` plays no part."""
    without: frozenset[str] = frozenset()
    """Of ``PRIORS``: what is switched off."""

    @property
    def shift_mag(self) -> float:
        """What μ gains from leaving the model's own scale."""
        return MODEL_M_B - self.m_b if self.m_b is not None else h0_magnitude_shift(self.h0, MODEL_H0)

    @property
    def scale(self) -> str:
        """The scale in words."""
        if self.m_b is not None:
            return f"M_B = {self.m_b:.3f} at Δm15 = 1.1 (μ moved by {self.shift_mag:+.3f} mag from H0 = {MODEL_H0})"
        if self.h0 == MODEL_H0:
            common = h0_magnitude_shift(MODEL_H0, MODEL_H0 + MODEL_H0_ERR)
            return (
                f"H0 = {MODEL_H0:.2f} km/s/Mpc (Cepheid anchor of the model; its own error, {common:.3f} mag, "
                "moves all distances together and is not in the budget)"
            )
        return f"H0 = {self.h0:.2f} km/s/Mpc (μ moved by {self.shift_mag:+.3f} mag from the model's {MODEL_H0})"
