"""Check values of noise, scintillation, airmass, apertures, Sun and Moon, each with its source."""

from __future__ import annotations

import math
from collections.abc import Callable

import erfa
import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from reduce.almanac.airmass import hardie, horizontal, hour_angle_at, kasten_young, pickering, transit_altitude
from reduce.almanac.sky import moon_phase, moon_position, separation_deg
from reduce.almanac.times import tt_minus_utc_s
from reduce.frames.detector import DIGITISATION_ADU
from reduce.measure.growth import correction_mag, gaussian_enclosed
from reduce.measure.noise import (
    MAG_PER_FRACTION,
    aperture_variance,
    exposure_for_snr,
    magnitude_error,
    scintillation,
    scintillation_young,
    snr,
)

GAUSSIAN_SIGMA_FWHM = 1.0 / (2.0 * math.sqrt(2.0 * math.log(2.0)))


def flat_floor(flats: int, electrons_px: float, pixels: int) -> float:
    """Magnitude error from the flat alone, light even over the pixels."""
    light = 1e6
    flat = pixels * (light / pixels) ** 2 / (flats * electrons_px)
    return MAG_PER_FRACTION * math.sqrt(aperture_variance(0.0, 0.0, float(pixels), 0.0, flat)) / light


@pytest.mark.parametrize(
    ("found", "expected", "within"),
    [
        # CCD-01: Howell, Handbook of CCD Astronomy, § 4.4; inputs and S/N about 342 from memory
        (snr(120065, 3100, 1.8333, 5, 1, 200, 5), 342.05, 0.1),
        # CCD-02: Merline & Howell 1995 (Exp. Astron. 6, 163), arithmetic of the equation
        (snr(10000, 200, 5, 8, 113.1, 500, 1.5), 45.965, 0.01),
        # CCD-03: the same with a perfectly known sky
        (snr(10000, 200, 5, 8, 113.1, math.inf, 1.5), 49.724, 0.01),
        # CCD-04: Merline & Howell 1995, arithmetic of the equation
        (snr(50000, 100, 2, 5, 78.54, 300, 1.0), 199.849, 0.05),
        # CCD-05: definition, 2.5 / ln 10 over S/N
        (magnitude_error(45.965), 0.02362, 1e-4),
        # CCD-06: quadratic solution of the CCD equation, no ring, no digitisation
        (exposure_for_snr(100, 50, 10, 0.1, 8, 80), 3438.0, 0.5),
        # CCD-07: standard deviation of a uniform distribution one unit wide
        (DIGITISATION_ADU, 0.28868, 1e-4),
        # CCD-10: Poisson arithmetic, 16 flats of 30000 electrons, light on 4 pixels
        (flat_floor(16, 30000, 4), 0.000784, 2e-6),
    ],
)
def test_ccd_equation(found: float, expected: float, within: float) -> None:
    assert found == pytest.approx(expected, abs=within)


@pytest.mark.parametrize(
    ("found", "expected"),
    [
        (scintillation_young(0.5, 1.5, 60, 1000), 0.0010861),  # SCI-01: Young 1967 (AJ 72, 747), as in Dravins 1998
        (scintillation_young(0.2, 1.0, 10, 0), 0.0027313),  # SCI-02: the same
        (scintillation(0.5, 1.5, 60, 1000, 1.5), 0.0015760),  # SCI-03: Osborn et al. 2015 (MNRAS 452, 1707), eq. 7
        (scintillation(1.0, 1.0, 1, 0, 1.5), 0.0047434),  # SCI-04: the same
        (scintillation(0.5, 1.5, 60, 1000, 1.56), 0.0016390),  # SCI-05: the same with Paranal's median C_Y
    ],
)
def test_scintillation(found: float, expected: float) -> None:
    assert found == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(
    ("formula", "altitude_deg", "expected"),
    [
        (pickering, 60, 1.1541),  # AM-P60: Pickering 2002 (DIO 12, 20)
        (pickering, 45, 1.4124),  # AM-P45: the same
        (pickering, 30, 1.9932),  # AM-P30: the same
        (pickering, 20, 2.9001),  # AM-P20: the same
        (pickering, 15, 3.8082),  # AM-P15: the same
        (pickering, 10, 5.5807),  # AM-P10: the same
        (pickering, 5, 10.3337),  # AM-P05: the same
        (pickering, 0, 38.7494),  # AM-P00: the same
        (kasten_young, 90, 1.0),  # Kasten & Young 1989 give 0.9997; raised to 1
        (kasten_young, 60, 1.1540),  # AM-K60: Kasten & Young 1989 (Appl. Opt. 28, 4735)
        (kasten_young, 30, 1.9943),  # AM-K30: the same
        (kasten_young, 20, 2.9031),  # AM-K20: the same
        (kasten_young, 10, 5.5860),  # AM-K10: the same
        (kasten_young, 5, 10.3058),  # AM-K05: the same
        (kasten_young, 0, 37.9196),  # AM-K00: the same
        (hardie, 60, 1.1543),  # AM-H60: Hardie 1962 (Astronomical Techniques, ch. 8)
        (hardie, 30, 1.9945),  # AM-H30: the same
        (hardie, 20, 2.9039),  # AM-H20: the same
        (hardie, 10, 5.5979),  # AM-H10: the same
    ],
)
def test_airmass(formula: Callable[[float], float], altitude_deg: float, expected: float) -> None:
    assert formula(altitude_deg) == pytest.approx(expected, abs=5e-4)


@pytest.mark.parametrize(
    ("radius_fwhm", "enclosed", "correction"),
    [
        (0.5, 0.50000, -0.7526),  # EE-0.5: integral of a Gaussian over a circle
        (0.68, 0.72253, -0.3529),  # EE-0.68: the same
        (1.0, 0.93750, -0.0701),  # EE-1: the same
        (1.5, 0.99805, -0.0021),  # EE-1.5: the same
    ],
)
def test_gaussian_growth(radius_fwhm: float, enclosed: float, correction: float) -> None:
    assert gaussian_enclosed(radius_fwhm) == pytest.approx(enclosed, abs=2e-4)
    assert correction_mag(gaussian_enclosed(radius_fwhm)) == pytest.approx(correction, abs=2e-4)


def test_best_aperture_against_the_sky() -> None:
    """S/N of the CCD equation with sky only, over the radius."""

    def worse(radius_fwhm: float) -> float:
        return -snr(gaussian_enclosed(radius_fwhm), 1e12, 0.0, 0.0, math.pi * radius_fwhm**2)

    best = minimize_scalar(worse, bounds=(0.3, 1.5), method="bounded", options={"xatol": 1e-8})
    # APR-01: root of e^x = 1 + 2x, x = r²/2σ²
    assert best.x == pytest.approx(0.67317, abs=1e-4)
    assert best.x / GAUSSIAN_SIGMA_FWHM == pytest.approx(1.58520, abs=1e-4)
    # APR-02: light within it
    assert gaussian_enclosed(best.x) == pytest.approx(0.71533, abs=1e-4)
    # APR-03: against the matched filter, whose noise is that of 4πσ² pixels of sky
    # (Naylor 1998, MNRAS 296, 339, reports some 10 % for optimal weights)
    matched = snr(1.0, 1e12, 0.0, 0.0, 4.0 * math.pi * GAUSSIAN_SIGMA_FWHM**2)
    assert -best.fun / matched == pytest.approx(0.9025, abs=5e-4)


def test_altitude_and_azimuth() -> None:
    # ALT-01: Meeus, Astronomical Algorithms, 2nd ed., example 13.b (Venus; azimuth there from the south)
    sidereal = (8 + 34 / 60 + 56.853 / 3600) * 15
    hour_angle = sidereal - (77 + 3 / 60 + 56 / 3600) - (23 + 9 / 60 + 16.641 / 3600) * 15
    altitude, azimuth = horizontal(hour_angle, -(6 + 43 / 60 + 11.61 / 3600), 38 + 55 / 60 + 17 / 3600)
    assert altitude == pytest.approx(15.1250, abs=1e-3)
    assert azimuth - 180.0 == pytest.approx(68.0336, abs=1e-3)


def test_hour_angle_and_transit() -> None:
    assert hour_angle_at(30.0, 54.27, 32.0) == pytest.approx(5.4597, abs=1e-3)  # HA-01: spherical trigonometry
    assert transit_altitude(-7.41, 50.0) == pytest.approx(32.59, abs=0.01)  # HA-02: 90 - |latitude - declination|


def test_separation() -> None:
    # SEP-01: Meeus, example 17.a (Arcturus and Spica)
    assert separation_deg(213.9154, 19.1825, 201.2983, -11.1614) == pytest.approx(32.7930, abs=1e-4)


def test_moon() -> None:
    tt = 48724.0  # 1992-04-12 00:00 TT
    utc = tt - float(tt_minus_utc_s(tt)) / 86400.0
    angle, lit = moon_phase(utc)
    assert angle == pytest.approx(69.076, abs=0.01)  # MOO-01: Meeus, example 48.a
    assert lit == pytest.approx(0.6786, abs=0.0005)  # MOO-01: the same
    to_date = erfa.pnm06a(2400000.5, tt)
    ra, dec = erfa.c2s(to_date @ erfa.s2c(*np.radians(moon_position(utc))))
    assert math.degrees(ra) % 360 == pytest.approx(134.688, abs=0.02)  # MOO-02: Meeus, example 47.a
    assert math.degrees(dec) == pytest.approx(13.768, abs=0.02)  # MOO-02: the same
