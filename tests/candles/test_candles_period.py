"""Periods: against direct linear algebra, constructed and published series, and how often the probabilities hold."""

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pulsating_stars import SAW, SINE, night_times, star

from reduce.candles.period import SIDEREAL_PER_DAY, alias_note, design, search_period
from reduce.candles.period_grid import COARSE_JITTER_MAG, COARSE_PRIOR_MAG, coarse_evidence, frequency_grid
from reduce.candles.population import FIRST_OVERTONE, FUNDAMENTAL, RRAB, RRC
from reduce.candles.series import Series, series_of

CEPHEIDS = (FUNDAMENTAL, FIRST_OVERTONE)


def search_cepheid(curve):
    return search_period(series_of(curve, ("B", "V", "I")), 0.8, 110.0, CEPHEIDS)


def plain_series(time, mag, err, band="V"):
    n = len(time)
    names = np.full(n, band)
    return Series(
        np.asarray(time, float), np.asarray(mag, float), np.full(n, err), np.zeros(n), names,
        np.array([f"{int(t)}" for t in time]), np.arange(n),
    )  # fmt: skip


def test_the_coarse_evidence_is_that_of_the_written_out_gaussian_model():
    rng = np.random.default_rng(3)
    series = series_of(star(night_times(14, rng), 5.4, rng=rng), ("V", "I"))
    first, step, n = 0.05, 0.0011, 700
    fast = coarse_evidence(series, first, step, n)
    size = np.where(series.band == "V", 1.0, 0.62)
    noise = np.diag(series.err**2 + COARSE_JITTER_MAG**2)
    means = np.column_stack([series.band == "V", series.band == "I"]).astype(float) * 1e3  # means are free
    prior = np.diag(np.repeat(COARSE_PRIOR_MAG, 2) ** 2)

    def log_evidence(covariance):
        _, log_det = np.linalg.slogdet(covariance)
        return -0.5 * (series.mag - 15.0) @ np.linalg.solve(covariance, series.mag - 15.0) - 0.5 * log_det

    null = log_evidence(noise + means @ means.T)
    for index in (0, 255, 256, 413, 699):
        waves = design(first + index * step, series.time - series.time[0], 3) * size[:, None]
        direct = log_evidence(noise + means @ means.T + waves @ prior @ waves.T) - null
        assert fast[index] == pytest.approx(direct, abs=2e-3)


def test_two_harmonics_of_the_constructed_series():
    # constructed series: t = 60 frac(0.6180339887498949 i), i = 1 to 80; P = 5.366341 (Lomb 1976, Scargle 1982)
    t = 60.0 * ((0.6180339887498949 * np.arange(1, 81)) % 1.0)
    y = 3.95 + 0.4 * np.sin(2 * np.pi * t / 5.366341) + 0.1 * np.sin(4 * np.pi * t / 5.366341 + 1.0)
    order = np.argsort(t)
    found = search_period(plain_series(t[order], y[order], 0.01), 1.0, 60.0, CEPHEIDS)
    assert 1.0 / found.best.frequency == pytest.approx(5.366341, abs=0.002)
    assert found.best.probability > 0.999


@pytest.mark.parametrize(("period", "harmonics"), [(1.9, SAW), (5.37, SAW), (12.6, SINE), (31.0, SAW)])
def test_a_period_is_found_within_its_error(period, harmonics):
    rng = np.random.default_rng(int(period * 10))
    found = search_cepheid(star(night_times(35, rng, 140.0), period, rng=rng, harmonics=harmonics))
    assert abs(found.best.frequency - 1.0 / period) < 4.0 * found.best.error
    assert found.best.error < 0.01 / 140.0
    assert found.best.probability > 0.98


@pytest.mark.parametrize(("period", "harmonics", "name"), [(0.547, SAW, "RRab"), (0.331, SINE, "RRc")])
def test_rr_lyrae_types_follow_from_period_and_shape(period, harmonics, name):
    rng = np.random.default_rng(8)
    series = series_of(star(night_times(45, rng, 90.0), period, "V", rng=rng, harmonics=harmonics), ("V",))
    found = search_period(series, 0.2, 1.0, (RRAB, RRC))
    assert 1.0 / found.best.frequency == pytest.approx(period, rel=1e-3)
    assert found.best.mode == name
    assert found.best.mode_probability > 0.9


def test_a_star_that_only_scatters_has_no_evidence():
    rng = np.random.default_rng(11)
    times = night_times(30, rng)
    flat = search_period(plain_series(times, 15.0 + rng.normal(0, 0.03, 30), 0.01), 0.8, 110.0, CEPHEIDS)
    assert flat.log_evidence < 8.0
    assert search_cepheid(star(times, 5.4, rng=rng)).log_evidence > 30.0


def test_too_few_points_are_not_searched():
    times = night_times(2, np.random.default_rng(1))
    assert search_cepheid(star(times, 5.4)) is None
    assert search_period(plain_series(2460000.0 + 0.01 * np.arange(9), np.zeros(9), 0.1), 0.8, 110.0, CEPHEIDS) is None


def test_one_visit_a_night_at_the_same_hour_leaves_the_daily_alias():
    rng = np.random.default_rng(4)
    times = 2460000.6 + np.sort(rng.choice(60, 11, replace=False))
    found = search_cepheid(star(times, 3.7, rng=rng, err=0.02))
    near = [each for each in found.candidates if abs(each.frequency - 1 / 3.7) < 0.01]
    images = [each for each in found.candidates if abs(each.frequency - (1 - 1 / 3.7)) < 0.01]
    assert near
    assert images
    assert near[0].probability < 0.9


@settings(max_examples=6, deadline=None)
@given(st.floats(-400.0, 400.0), st.floats(-3.0, 3.0))
def test_the_calendar_and_the_brightness_do_not_matter(days, magnitudes):
    rng = np.random.default_rng(5)
    times = night_times(20, rng)
    mag = 15.0 + 0.3 * np.cos(2 * np.pi * times / 4.2)
    one = search_period(plain_series(times, mag, 0.01), 0.8, 110.0, CEPHEIDS)
    other = search_period(plain_series(times + days, mag + magnitudes, 0.01), 0.8, 110.0, CEPHEIDS)
    assert other.best.frequency == pytest.approx(one.best.frequency, rel=1e-6)
    assert other.log_evidence == pytest.approx(one.log_evidence, abs=0.1)


def test_the_step_is_a_tenth_of_the_resolution_and_no_period_exceeds_twice_the_series():
    series = plain_series([0.0, 10.0, 200.0], [1.0, 2.0, 3.0], 0.1)
    first, step, n = frequency_grid(series, 0.8, 1000.0)
    assert first == pytest.approx(0.5 / 200.0)
    assert step <= 0.1 / 200.0
    assert first + (n - 1) * step == pytest.approx(1.0 / 0.8, abs=step)


def test_aliases_have_names():
    best, resolution = 0.27, 1.0 / 150.0
    assert alias_note(1.0 - best, best, resolution) == "1/d alias"
    assert alias_note(best + 2.0, best, resolution) == "2 × 1/d alias"
    assert alias_note(2.0 * best, best, resolution) == "P/2"
    assert alias_note(0.5 * best, best, resolution) == "2 P"
    assert alias_note(best + 4.0 * resolution, best, resolution) == "neighbour"
    assert alias_note(best + SIDEREAL_PER_DAY, best, 1.0 / 5000.0) == "1/sidereal day alias"


def test_a_hipparcos_cepheid_has_its_published_frequency():
    # published frequency 0.060033386 per day (series of the package iar, HIPPARCOS photometry)
    found = importlib.util.find_spec("iar")
    if found is None or not found.submodule_search_locations:
        pytest.skip("the package iar with the HIPPARCOS series is not installed")
    path = Path(next(iter(found.submodule_search_locations))).parent / "data" / "clcep.csv"
    rows = pd.read_csv(path)
    rows = rows.sort_values("t")
    series = plain_series(rows["t"].to_numpy(float), rows["m"].to_numpy(float), 0.015)
    result = search_period(series, 0.8, 110.0, CEPHEIDS)
    assert result.best.frequency == pytest.approx(0.060033386, abs=0.1 / series.span_d)
    assert result.best.probability > 0.99


@pytest.mark.slow
def test_probabilities_hold():
    """Of stars with a dozen visits, as many periods are right as the probabilities promise."""
    rng = np.random.default_rng(77)
    promised, right = [], []
    for _ in range(60):
        period = float(np.exp(rng.uniform(np.log(1.5), np.log(30.0))))
        turn = rng.uniform(0.0, 2.0 * np.pi)
        harmonics = tuple((a * rng.uniform(0.7, 1.2), p + k * turn) for k, (a, p) in enumerate(SAW, 1))
        found = search_cepheid(star(night_times(12, rng, 70.0), period, "VI", 0.015, rng, harmonics))
        promised.append(found.best.probability)
        right.append(abs(found.best.frequency - 1.0 / period) < 0.25 / 70.0)
    promised, right = np.array(promised), np.array(right)
    spread = np.sqrt(np.sum(promised * (1.0 - promised)))
    assert abs(right.sum() - promised.sum()) < 3.0 * spread + 2.0
    sure = promised > 0.95
    assert sure.sum() > 10
    assert right[sure].mean() > 0.9
