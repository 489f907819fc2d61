"""The CCD equation against simulated electrons."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.measure.noise import exposure_for_snr, magnitude_error, scintillation, scintillation_young, snr


@pytest.mark.parametrize("median_sky", [False, True])
def test_snr_is_that_of_simulated_apertures(median_sky: bool) -> None:
    rng = np.random.default_rng(1)
    trials, area, ring, sky, dark, read_noise, source = 4000, 60, 150, 80.0, 3.0, 6.0, 3000.0
    aperture = rng.poisson(source + area * (sky + dark), trials) + rng.normal(0, read_noise * area**0.5, trials)
    around = rng.poisson(sky + dark, (trials, ring)) + rng.normal(0, read_noise, (trials, ring))
    level = np.median(around, axis=1) if median_sky else around.mean(axis=1)
    flux = aperture - area * level
    expected = snr(source, sky, dark, read_noise, area, ring, median_sky=median_sky)
    assert source / flux.std() == pytest.approx(expected, rel=0.04)


@given(
    wanted=st.floats(3, 500), rate=st.floats(1, 1e5), sky=st.floats(0, 1e3),
    dark=st.floats(0, 10), read_noise=st.floats(0, 30), area=st.floats(1, 1e3),
)  # fmt: skip
def test_the_exposure_reaches_the_wanted_snr(
    wanted: float, rate: float, sky: float, dark: float, read_noise: float, area: float
) -> None:
    seconds = exposure_for_snr(wanted, rate, sky, dark, read_noise, area)
    assert snr(rate * seconds, sky * seconds, dark * seconds, read_noise, area) == pytest.approx(wanted, rel=1e-6)


@given(st.floats(0.05, 8), st.floats(1, 3), st.floats(1, 3600), st.floats(0, 5000))
def test_scintillation_laws_differ_by_the_coefficient(d: float, x: float, t: float, h: float) -> None:
    """Both laws share their powers of aperture, time and height; at X = 1 the airmass powers agree too."""
    ratio = scintillation(d, x, t, h, 1.0) / scintillation_young(d, x, t, h)
    assert ratio * x**0.25 == pytest.approx(scintillation(1, 1, 1, 0, 1.0) / scintillation_young(1, 1, 1, 0))
    assert scintillation(d, x, 4 * t, h) == pytest.approx(scintillation(d, x, t, h) / 2)


def test_a_bright_star_is_limited_by_its_photons() -> None:
    assert snr(1e6, 0, 0, 0, 50) == pytest.approx(1e3)
    assert magnitude_error(1e3) == pytest.approx(1.0857e-3, rel=1e-4)
