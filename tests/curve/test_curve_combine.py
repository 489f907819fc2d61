"""Combining repeats, and magnitudes of little light."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.curve.combine import combine, expected_errors
from reduce.curve.light_curve import to_light_curve
from reduce.curve.limits import asymmetric_errors, is_detection, magnitude, magnitude_err
from reduce.records import Point


def test_scatter_beyond_the_errors_widens_them_from_three_repeats_on() -> None:
    two = combine(np.array([90.0, 110.0]), np.array([1.0, 1.0]))
    three = combine(np.array([90.0, 110.0, 100.0]), np.array([1.0, 1.0, 1.0]))
    assert two.flux_err == pytest.approx(2**-0.5)
    assert three.flux_err == pytest.approx(10 / 3**0.5)  # standard deviation 10 of three


def test_weights_from_expected_errors_do_not_bias() -> None:
    rng = np.random.default_rng(3)
    truth, background = 100.0, 20.0
    naive, fair, pulls = [], [], []
    for _ in range(4000):
        flux = rng.poisson(truth + background, 3) - background
        err = np.sqrt(np.maximum(flux, 0) + background)
        naive.append(combine(flux, err).flux)
        mean = combine(flux, expected_errors(flux, err, np.ones(3), np.zeros(3)))
        fair.append(mean.flux)
        pulls.append((mean.flux - truth) / mean.flux_err)
    assert np.mean(naive) < truth - 0.5  # what this avoids
    assert np.mean(fair) == pytest.approx(truth, abs=0.3)  # standard error 0.1
    assert 0.8 < np.std(pulls) < 1.02  # the larger of two errors is a little too large


@given(st.floats(0.1, 1e6), st.floats(1e-3, 1e5))
def test_asymmetric_errors_bracket_the_linear_one(flux: float, flux_err: float) -> None:
    fainter, brighter = asymmetric_errors(flux, flux_err)
    linear = magnitude_err(flux, flux_err)
    assert brighter <= linear * (1 + 1e-6) <= fainter * (1 + 2e-6) or math.isinf(fainter)
    if flux > flux_err:
        assert magnitude(flux - flux_err) == pytest.approx(magnitude(flux) + fainter, abs=1e-8)


def test_detection_needs_three_sigma() -> None:
    assert is_detection(30.0, 10.0)
    assert not is_detection(29.9, 10.0)
    assert not is_detection(-40.0, 10.0)


def test_light_curve_takes_kept_points_and_limits_in_order() -> None:
    kept = Point("x", None, "n1", "B", 2.0, None, 15.0, 0.01, None, None, 1e4, 100.0, "kept")
    limit = Point("x", None, "n0", "V", 1.0, None, None, None, 0.003, 0.02, 5.0, 10.0, "limit", zp_group="c/V/n0")
    others = [
        Point("x", None, "n", "B", 1.5, None, 15.0, 0.01, 0.0, 0.0, 1e4, 100.0, state)  # type: ignore[arg-type]
        for state in ("doubtful", "dropped", "excluded")
    ]
    curve = to_light_curve([kept, *others, limit])
    assert curve.mjd.tolist() == [1.0, 2.0]
    assert curve.band.tolist() == ["V", "B"]
    assert curve.night.tolist() == ["c/V/n0", "n1"]
    assert math.isnan(curve.mag[0])
    assert curve.err_night.tolist() == [0.003, 0.0]
    assert math.isnan(curve.err_band[1])
    assert curve.flux.tolist() == [5.0, 1e4]
