"""Noise of one aperture: the CCD equation, scintillation, and what follows from them."""

from __future__ import annotations

import math
from typing import TypeVar

from reduce.frames.detector import DIGITISATION_ADU
from reduce.records import Floats

T = TypeVar("T", float, Floats)

MAG_PER_FRACTION = 2.5 / math.log(10.0)
MEDIAN_VARIANCE = math.pi / 2.0
"""Variance of a median over that of a mean, Gaussian noise."""
ATMOSPHERE_M = 8000.0
"""Scale height in the scintillation laws."""


def pixel_variance(
    dark_e_px: float, read_noise_e: float, gain_e_per_adu: float = 0.0, master_variance_e2: float = 0.0
) -> float:
    """Electrons² of one pixel without sky and star: dark, read-out, digitisation, masters."""
    digitisation_e = gain_e_per_adu * DIGITISATION_ADU
    return dark_e_px + read_noise_e**2 + digitisation_e**2 + master_variance_e2


def aperture_variance(photons_e: T, readout_e2: T, area_px: T, sky_err_e_px: T, flat_e2: T | float = 0.0) -> T:
    """Variance of an aperture's flux, electrons².

    The CCD equation of Merline & Howell (1995, Exp. Astron. 6, 163) with the terms already summed over the pixels,
    so that one formula serves planning (pixels alike) and measuring (every pixel its own, edge pixels in part).

    Parameters
    ----------
    photons_e
        Electrons of star and sky in the aperture.
    readout_e2
        Variance of everything that is not light (`pixel_variance`), summed over the aperture.
    area_px
        Area over which the sky level was subtracted.
    sky_err_e_px
        Error of that level; it is the same for all pixels, hence the square of the area.
    flat_e2
        Variance from the noise of the flat.
    """
    return photons_e + readout_e2 + flat_e2 + (area_px * sky_err_e_px) ** 2


def snr(
    source_e: float,
    sky_e_px: float,
    dark_e_px: float,
    read_noise_e: float,
    area_px: float,
    sky_px: float = math.inf,
    gain_e_per_adu: float = 0.0,
    *,
    median_sky: bool = False,
) -> float:
    """Signal-to-noise of a star in an aperture of ``area_px`` with its sky from ``sky_px`` pixels."""
    readout = pixel_variance(dark_e_px, read_noise_e, gain_e_per_adu)
    sky_variance = (sky_e_px + readout) / sky_px * (MEDIAN_VARIANCE if median_sky else 1.0)
    photons = source_e + area_px * sky_e_px
    return source_e / math.sqrt(aperture_variance(photons, area_px * readout, area_px, math.sqrt(sky_variance)))


def magnitude_error(signal_to_noise: float) -> float:
    """Linear error of a magnitude; use fluxes below a signal-to-noise of about 5."""
    return MAG_PER_FRACTION / signal_to_noise


def exposure_for_snr(
    wanted_snr: float,
    source_e_s: float,
    sky_e_s_px: float,
    dark_e_s_px: float,
    read_noise_e: float,
    area_px: float,
) -> float:
    """Seconds that reach a signal-to-noise with a well-known sky: the quadratic solution of the CCD equation."""
    b = wanted_snr**2 * (source_e_s + area_px * (sky_e_s_px + dark_e_s_px))
    c = wanted_snr**2 * area_px * read_noise_e**2
    return (b + math.sqrt(b**2 + 4.0 * source_e_s**2 * c)) / (2.0 * source_e_s**2)


def scintillation(
    aperture_m: float, airmass: float, exposure_s: float, height_m: float, coefficient: float = 1.5
) -> float:
    """Fractional flux rms of a long exposure (Osborn et al. 2015, MNRAS 452, 1707, eq. 7).

    Parameters
    ----------
    coefficient
        C_Y of the site; about 1.5, 1.56 at Paranal.
    """
    optics = math.pow(aperture_m, -2.0 / 3.0) * math.exp(-height_m / ATMOSPHERE_M)
    return coefficient * optics * math.sqrt(1e-5 * airmass**3 / exposure_s)


def scintillation_young(aperture_m: float, airmass: float, exposure_s: float, height_m: float) -> float:
    """Fractional flux rms after Young (1967, AJ 72, 747): too low at real sites, for comparison with older work."""
    optics = math.pow(100.0 * aperture_m, -2.0 / 3.0) * math.exp(-height_m / ATMOSPHERE_M)
    return 0.09 * optics * math.pow(airmass, 1.75) / math.sqrt(2.0 * exposure_s)
