"""Mean magnitudes and shapes of folded light curves."""

import math

import numpy as np
import pytest
from pulsating_stars import MEAN, SAW, SIZE, night_times, star, true_mean

from reduce.candles.fourier import coverage, fit_bands, largest_gap
from reduce.candles.period import FineModel
from reduce.candles.population import FUNDAMENTAL
from reduce.candles.series import series_of

PERIOD = 5.37


def fits_of(curve, period=PERIOD):
    series = series_of(curve, ("B", "V", "I"))
    fits, keep = fit_bands(series, FineModel(series, FUNDAMENTAL), 1.0 / period)
    return {fit.band: fit for fit in fits}, keep


def test_the_intensity_mean_is_that_of_the_light_not_of_the_magnitudes():
    rng = np.random.default_rng(1)
    fits, _ = fits_of(star(night_times(60, rng, 200.0), PERIOD, rng=rng, err=0.005))
    for band in "VI":
        mean, err = fits[band].intensity_mean()
        assert abs(mean - true_mean(band)) < 4.0 * err
        assert err < 0.003
    assert true_mean("V") < MEAN["V"] - 0.03  # the wave in flux is not the wave in magnitudes


def test_errors_of_means_are_honest():
    pulls = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        fits, _ = fits_of(star(night_times(40, rng, 200.0), PERIOD, rng=rng, err=0.02))
        mean, err = fits["V"].intensity_mean()
        pulls.append((mean - true_mean("V")) / err)
    assert 0.7 < np.std(pulls) < 1.4
    assert abs(np.mean(pulls)) < 0.5


def test_shape_parameters_are_those_put_in():
    rng = np.random.default_rng(2)
    fits, _ = fits_of(star(night_times(90, rng, 300.0), PERIOD, rng=rng, err=0.002))
    r21, phi21 = fits["V"].shape()
    (a1, p1), (a2, p2) = SAW[:2]
    assert r21 == pytest.approx(a2 / a1, abs=0.01)
    assert phi21 == pytest.approx((p2 - 2 * p1) % (2 * math.pi), abs=0.03)
    assert fits["V"].amplitude() == pytest.approx(np.ptp(SIZE["V"] * _wave()), abs=0.02)
    assert fits["V"].order >= 4


def _wave():
    phase = np.linspace(0, 1, 2000)
    return sum(a * np.cos(2 * np.pi * k * phase + p) for k, (a, p) in enumerate(SAW, 1))


def test_a_band_with_few_points_leans_on_the_other_and_says_so():
    rng = np.random.default_rng(3)
    curve = star(night_times(50, rng, 200.0), PERIOD, rng=rng, err=0.005)
    rows = np.flatnonzero((curve.band == "V") | (np.cumsum(curve.band == "I") <= 6))
    from candle_light_curves import taken

    fits, _ = fits_of(taken(curve, rows))
    assert fits["V"].covered
    assert not fits["I"].covered
    mean, err = fits["I"].intensity_mean()
    assert abs(mean - true_mean("I")) < 4.0 * err + 0.01
    assert 0.002 < err < 0.06


def test_a_gap_of_phase_is_not_filled_with_harmonics():
    rng = np.random.default_rng(4)
    times = night_times(160, rng, 400.0)
    times = times[((times / PERIOD) % 1.0 > 0.35)]
    fits, _ = fits_of(star(times, PERIOD, rng=rng))
    assert fits["V"].gap > 0.3
    assert not fits["V"].covered
    mean, err = fits["V"].intensity_mean()
    assert abs(mean - true_mean("V")) < 4.0 * err


def test_a_wrong_point_is_marked_and_does_not_pull():
    rng = np.random.default_rng(5)
    curve = star(night_times(60, rng, 200.0), PERIOD, rng=rng, err=0.01)
    curve.mag[17] += 0.8
    fits, keep = fits_of(curve)
    series = series_of(curve, ("V", "I"))
    assert not keep[np.flatnonzero(series.row == 17)[0]]
    assert keep.sum() >= len(series) - 3
    mean, _ = fits["V"].intensity_mean()
    assert abs(mean - true_mean("V")) < 0.01


def test_gap_and_coverage():
    assert largest_gap(np.array([0.1, 0.2, 0.9])) == pytest.approx(0.7)
    assert largest_gap(np.array([0.3])) == pytest.approx(1.0)
    assert coverage(np.array([0.5])) == pytest.approx(0.1, abs=0.01)
    assert coverage(np.linspace(0, 1, 30)) == 1.0
