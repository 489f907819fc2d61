"""The Moon's light against the worked example of its publication."""

import pytest

from reduce.plan.moonlight import moonlight_nl, nanolamberts, sky_airmass, v_mag_arcsec2

# Krisciunas & Schaefer (1991, PASP 103, 1033): equations 1, 3, 15, 20 and 21, with the coefficients printed there;
# evaluated apart from this code for phase angle 60, separation 50, Moon's zenith distance 40, sky's 30, k = 0.172,
# dark sky V = 21.587 mag/arcsec².
PHASE, SEPARATION, MOON_ZENITH, SKY_ZENITH, EXTINCTION, DARK_V = 60.0, 50.0, 40.0, 30.0, 0.172, 21.587
MOONLIGHT_NL = 372.63
MOONLIT_V = 19.694


def test_moonlight_of_the_worked_case() -> None:
    found = moonlight_nl(PHASE, SEPARATION, 90.0 - MOON_ZENITH, 90.0 - SKY_ZENITH, EXTINCTION)
    assert found == pytest.approx(MOONLIGHT_NL, abs=0.05)


def test_moonlit_sky_of_the_worked_case() -> None:
    moonlight = moonlight_nl(PHASE, SEPARATION, 90.0 - MOON_ZENITH, 90.0 - SKY_ZENITH, EXTINCTION)
    assert v_mag_arcsec2(nanolamberts(DARK_V) + moonlight) == pytest.approx(MOONLIT_V, abs=0.001)


def test_path_through_the_sky_s_layer() -> None:
    # their eq. 3, X(Z) = (1 - 0.96 sin² Z)^-1/2, by hand: X(60) = (1 - 0.72)^-1/2
    assert sky_airmass(60.0) == pytest.approx(1.8898, abs=1e-4)
    assert sky_airmass(0.0) == 1.0
