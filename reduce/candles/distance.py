"""Distance moduli, distances and redshifts: the small formulas that every candle shares."""

from __future__ import annotations

import math

import numpy as np

from reduce.records import Floats

SPEED_OF_LIGHT_KM_S = 299792.458
MODEL_H0 = 73.04
"""H0 in km/s/Mpc that the type Ia model's absolute magnitudes stand on (Riess et al. 2022, ApJ 934, L7)."""


def modulus_to_mpc(mu: float) -> float:
    """Distance in Mpc of modulus ``mu`` (mag): 10**((mu - 25) / 5)."""
    return float(10.0 ** ((mu - 25.0) / 5.0))


def mpc_to_modulus(distance_mpc: float) -> float:
    """Distance modulus (mag) of a distance in Mpc.

    Raises
    ------
    ValueError
        When the distance is not positive.
    """
    if not distance_mpc > 0:
        raise ValueError("a distance must be positive")
    return 5.0 * math.log10(distance_mpc) + 25.0


def fractional_distance_error(mu_err: float) -> float:
    """Relative error of the distance, ln(10)/5 times the error of the modulus (mag)."""
    return math.log(10.0) / 5.0 * mu_err


def mpc_with_errors(mu: float, mu_err: float) -> tuple[float, float, float]:
    """Distance in Mpc with its upper and lower errors: the 1 σ interval of the modulus, not a linear step."""
    distance = modulus_to_mpc(mu)
    return distance, modulus_to_mpc(mu + mu_err) - distance, distance - modulus_to_mpc(mu - mu_err)


def hubble_modulus(z: float, h0: float = MODEL_H0, q0: float = -0.55, j0: float | None = None) -> float:
    """Modulus (mag) of redshift ``z`` by the expansion at low redshift (Visser 2004, CQG 21, 2603).

    d_L = (c z / H0) [1 + (1 - q0) z / 2], and -(1 - q0 - 3 q0² + j0) z² / 6 when the jerk ``j0`` is given.

    Raises
    ------
    ValueError
        When ``z`` is not positive.
    """
    if not z > 0:
        raise ValueError("the Hubble law needs a positive redshift")
    series = 1.0 + (1.0 - q0) * z / 2.0
    if j0 is not None:
        series -= (1.0 - q0 - 3.0 * q0**2 + j0) * z**2 / 6.0
    return mpc_to_modulus(SPEED_OF_LIGHT_KM_S * z / h0 * series)


def flat_lcdm_modulus(z: float, h0: float = MODEL_H0, omega_m: float = 0.3) -> float:
    """Modulus (mag) of redshift ``z`` in a flat universe of matter and Λ, without radiation."""
    from astropy.cosmology import FlatLambdaCDM

    return float(FlatLambdaCDM(H0=h0, Om0=omega_m, Tcmb0=0).distmod(z).value)


def peculiar_velocity_modulus_error(z: float, sigma_v_km_s: float = 250.0) -> float:
    """Error (mag) that peculiar velocities put on a modulus taken from redshift: 5/ln(10) σ_v/(c z)."""
    return 5.0 / math.log(10.0) * sigma_v_km_s / (SPEED_OF_LIGHT_KM_S * z)


def h0_magnitude_shift(h0_from: float, h0_to: float) -> float:
    """What an absolute magnitude gains when its scale moves from one H0 to another (mag)."""
    return 5.0 * math.log10(h0_to / h0_from)


def rest_phase(mjd: Floats | float, t_max: float, z: float) -> Floats:
    """Rest-frame days since maximum: observed days shortened by time dilation."""
    return np.asarray((mjd - t_max) / (1.0 + z), float)
