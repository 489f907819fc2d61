"""Growth curves from noisy frames against the profile that GalSim drew."""

from __future__ import annotations

import numpy as np
import pytest
from star_images import SCALE_ARCSEC, calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.growth import correction_mag, gaussian_enclosed, growth_curve
from reduce.records import LADDER_FWHM, STAR_DTYPE, StarFlag

FWHM = 3.0


def frame(seed: int, flux=(1e4, 6e5)):
    rng = np.random.default_rng(seed)
    x, y = grid(400, 50, rng)
    truth = draw(moffat(FWHM), x, y, np.exp(rng.uniform(*np.log(flux), len(x))), 400)
    data = expose(truth.light_e, 500.0, 8.0, rng)
    table = measure_stars(calibrated(data), x, y, FWHM, SCALE_ARCSEC, truth.xy)
    exact = measure_stars(calibrated(truth.light_e + 500.0), x, y, FWHM, SCALE_ARCSEC, truth.xy)
    return truth, table, exact


def test_corrections_and_their_errors() -> None:
    pulls = []
    for seed in range(12):
        _, table, exact = frame(seed)
        mag, err = growth_curve(table)
        sums = exact["flux_e"][:, : len(LADDER_FWHM)].mean(axis=0)
        expected = -2.5 * np.log10(sums[-1] / sums)
        assert mag == pytest.approx(expected, abs=5e-3)
        assert (mag[:-1] < 0).all()
        assert mag[-1] == err[-1] == 0.0
        pulls.append((mag - expected)[:-1] / err[:-1])
    assert 0.5 < np.sqrt(np.mean(np.square(pulls))) < 1.4


def test_corrected_fluxes_are_unbiased_in_every_aperture() -> None:
    offsets = []
    for seed in range(6):
        _, table, exact = frame(seed, (1e5, 6e5))
        mag, _ = growth_curve(table)
        whole = exact["flux_e"][:, len(LADDER_FWHM) - 1]
        corrected = table["flux_e"][:, : len(LADDER_FWHM)] * 10 ** (-0.4 * mag)
        offsets.append(2.5 * np.log10((corrected / whole[:, None]).mean(axis=0)))
    assert np.abs(np.mean(offsets, axis=0)).max() < 2e-3
    assert np.abs(offsets).max() < 5e-3


def test_one_odd_star_does_not_count() -> None:
    _, table, _ = frame(3)
    before, _ = growth_curve(table)
    brightest = np.argmax(table["flux_e"][:, 0])
    table["flux_e"][brightest, :5] *= 0.8
    after, _ = growth_curve(table)
    assert after == pytest.approx(before, abs=2e-3)


def test_flagged_stars_and_targets_do_not_count() -> None:
    _, table, _ = frame(4)
    expected, _ = growth_curve(table[5:])
    table["flags"][:3, -5] |= np.uint32(StarFlag.CROWDED)
    table["role"][3:5] = 1
    table["flux_e"][:5] *= np.linspace(1, 2, 13)
    mag, _ = growth_curve(table)
    np.testing.assert_array_equal(mag, expected)


def test_too_few_stars_give_no_curve() -> None:
    _, table, _ = frame(5)
    for stars in (table[:2], np.zeros(0, STAR_DTYPE)):
        mag, err = growth_curve(stars)
        assert np.isnan(mag).all()
        assert np.isnan(err).all()


def test_a_gaussian_measured_is_the_gaussian_of_the_formula() -> None:
    """Pixels blur twice: once in the light, once in the apertures that take whole pixels in part."""
    fwhm = 16.0
    sigma = np.sqrt((fwhm / 2.3548200450) ** 2 - 1.0 / 12.0)  # sampled, not integrated: one blur is left
    rows, columns = np.mgrid[0:400, 0:400]
    x, y = np.array([200.3]), np.array([199.6])
    light = np.exp(-((columns - x) ** 2 + (rows - y) ** 2) / (2 * sigma**2)) / (2 * np.pi * sigma**2)
    table = measure_stars(calibrated(1e6 * light), x, y, fwhm, 8.0, np.zeros((0, 2)))
    for k, radius in enumerate(LADDER_FWHM):
        assert correction_mag(table["flux_e"][0, k] / 1e6) == pytest.approx(
            correction_mag(gaussian_enclosed(radius)), abs=2e-4
        )
