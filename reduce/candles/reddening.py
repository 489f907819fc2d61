"""Milky Way reddening: two scales of E(B-V), one conversion between them."""

from __future__ import annotations

from reduce.records import ReddeningScale

SF11_PER_SFD = 0.86
"""Recalibration of the 1998 map, 14 % lower (Schlafly & Finkbeiner 2011, ApJ 737, 103, abstract)."""

EXTINCTION_PER_SFD = {
    "B": 3.626, "V": 2.742, "R": 2.169, "I": 1.505, "g": 3.303, "r": 2.285, "i": 1.698,
}  # fmt: skip
"""A_X / E(B-V) on the *unscaled* SFD scale, R_V = 3.1 (Schlafly & Finkbeiner 2011, Table 6)."""

RELATIVE_MAP_ERROR = 0.16
"""Relative error of a map value of E(B-V); 16 % after Schlegel et al. 1998 (ApJ 500, 525), from memory."""


def to_sf11(ebv: float, scale: ReddeningScale) -> float:
    """E(B-V) in mag on the recalibrated Schlafly & Finkbeiner (2011) scale; the only conversion there is."""
    return ebv * SF11_PER_SFD if scale == "SFD" else ebv


def milky_way_extinction(band: str, ebv: float, scale: ReddeningScale) -> float:
    """A_X in mag for E(B-V) of the named scale, with the Table 6 coefficients.

    Raises
    ------
    KeyError
        For a band without a coefficient.
    """
    sfd = ebv if scale == "SFD" else ebv / SF11_PER_SFD
    return EXTINCTION_PER_SFD[band] * sfd
