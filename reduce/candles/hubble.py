"""What a redshift alone says of a distance: shown beside an estimate, never mixed in."""

from __future__ import annotations

import math

import numpy as np

from reduce.candles.assumptions import Assumptions
from reduce.candles.distance import (
    MODEL_H0,
    SPEED_OF_LIGHT_KM_S,
    hubble_modulus,
    peculiar_velocity_modulus_error,
)
from reduce.records import HubbleModulus, Target

CMB_DIPOLE_KM_S, CMB_DIPOLE_RA_DEG, CMB_DIPOLE_DEC_DEG = 369.82, 167.942, -6.944
"""The Sun against the microwave background (Planck Collaboration 2020, A&A 641, A1; from memory)."""
LEAST_Z = 0.001
"""Below, the Hubble law says nothing (cz of 300 km/s is what galaxies have of their own)."""


def cmb_redshift(z: float, ra_deg: float, dec_deg: float) -> float:
    """Redshift in the frame of the microwave background of heliocentric ``z``: (1 + z)(1 + v cos θ / c) - 1."""
    ra, dec, ra_0, dec_0 = np.radians([ra_deg, dec_deg, CMB_DIPOLE_RA_DEG, CMB_DIPOLE_DEC_DEG])
    cosine = np.sin(dec) * np.sin(dec_0) + np.cos(dec) * np.cos(dec_0) * np.cos(ra - ra_0)
    return float((1.0 + z) * (1.0 + CMB_DIPOLE_KM_S / SPEED_OF_LIGHT_KM_S * cosine) - 1.0)


def hubble_expectation(target: Target, assumptions: Assumptions) -> HubbleModulus | None:
    """Modulus of the target's redshift on the scale of the estimate, with the error of peculiar velocities (250 km/s).

    A calibrated M_B says nothing of H0; then that of the model is used.
    """
    if target.z is None:
        return None
    known = math.isfinite(target.ra_deg) and math.isfinite(target.dec_deg)
    z = cmb_redshift(target.z, target.ra_deg, target.dec_deg) if known else target.z
    if z < LEAST_Z:
        return None
    h0 = MODEL_H0 if assumptions.m_b is not None else assumptions.h0
    frame = "CMB" if known else "heliocentric"
    return HubbleModulus(hubble_modulus(z, h0, j0=1.0), peculiar_velocity_modulus_error(z), z, frame)
