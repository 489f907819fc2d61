"""The forecast error of μ against fits of light curves that really hold the points."""

import numpy as np
import pytest
from candle_light_curves import TRUTH, joined, simulated, target

from reduce.plan.forecast import Slot, expected_mag, outlook, solved_curve

CASES = [
    ("BV", np.arange(-8.0, 16.0, 3.0), [("I", 25.0)]),
    ("BV", np.arange(-8.0, 16.0, 3.0), [("I", 2.0), ("I", 20.0), ("R", 5.0)]),
    ("BVRI", np.arange(-6.0, 8.0, 4.0), [("B", 15.0)]),
    ("BVRI", np.arange(-6.0, 8.0, 4.0), [("B", 12.0), ("V", 12.0), ("B", 20.0), ("I", 25.0)]),
]
TIME_STRETCH = 1.0 + TRUTH["z"]


def slots_of(points: list[tuple[str, float]]) -> list[Slot]:
    return [Slot(f"night {k}", TRUTH["t_max"] + phase * TIME_STRETCH, band) for k, (band, phase) in enumerate(points)]


@pytest.mark.parametrize(("bands", "phases", "extra"), CASES)
def test_forecast_is_what_the_fit_then_says(bands, phases, extra) -> None:
    forecasts, fits = [], []
    for seed in range(3):
        rng = np.random.default_rng([7, seed])
        seen = simulated(TRUTH, bands=bands, phases=phases, err=0.02, noise=rng)
        now = solved_curve(seen, target())
        ahead = outlook(now, slots_of(extra), {})
        for k in range(len(extra)):
            ahead.take(k, 0.02**2)
        forecasts.append(ahead.mu_variance**0.5)
        whole = seen
        for band, phase in extra:
            whole = joined(whole, simulated(TRUTH, bands=band, phases=[phase], err=0.02, noise=rng))
        fits.append(float(solved_curve(whole, target()).err[0]))
        assert forecasts[-1] < float(now.err[0])
    assert np.mean(forecasts) == pytest.approx(np.mean(fits), rel=0.10)


def now_and_ahead(extra):
    seen = simulated(TRUTH, bands="BV", phases=np.arange(-6.0, 6.0, 3.0), err=0.02, noise=np.random.default_rng(3))
    now = solved_curve(seen, target())
    return now, outlook(now, slots_of(extra), {"B": 0.01, "V": 0.01, "I": 0.01})


EXTRA = [("B", 15.0), ("V", 15.0), ("I", 22.0), ("B", 30.0)]


def test_gain_is_what_taking_brings() -> None:
    _, ahead = now_and_ahead(EXTRA)
    before, gain = ahead.mu_variance, ahead.gain(2, 0.03**2)
    ahead.take(2, 0.03**2)
    assert before - ahead.mu_variance == pytest.approx(gain, rel=1e-9)


def test_order_of_exposures_does_not_matter() -> None:
    _, one = now_and_ahead(EXTRA)
    _, two = now_and_ahead(EXTRA)
    for k in (0, 1, 2, 3):
        one.take(k, 0.03**2)
    for k in (3, 1, 0, 2):
        two.take(k, 0.03**2)
    np.testing.assert_allclose(one.theta, two.theta, rtol=1e-8, atol=1e-12)


def test_repeating_an_exposure_is_like_a_longer_one() -> None:
    _, one = now_and_ahead(EXTRA)
    _, two = now_and_ahead(EXTRA)
    one.take(1, 0.02**2)
    two.take(1, 2 * 0.02**2)
    two.take(1, 2 * 0.02**2)
    assert one.mu_variance == pytest.approx(two.mu_variance, rel=1e-9)


def test_no_exposure_loses_and_none_helps_without_end() -> None:
    """A point a hundred times repeated keeps the scatter of its supernova and the errors of band and night."""
    _, ahead = now_and_ahead(EXTRA)
    start = ahead.mu_variance
    values = []
    for _ in range(100):
        ahead.take(1, 0.01**2)
        values.append(ahead.mu_variance)
    assert all(np.diff([start, *values]) <= 1e-15)
    assert values[-1] > 0.3 * start
    assert values[-1] == pytest.approx(values[10], rel=0.02)


def test_outside_the_model_nothing_is_promised() -> None:
    _, ahead = now_and_ahead([("B", 120.0), ("V", 15.0)])
    assert ahead.gain(0, 0.02**2) < 1e-3 * ahead.gain(1, 0.02**2)


def test_slots_keep_their_order_whatever_their_bands() -> None:
    _, one = now_and_ahead(EXTRA)
    _, two = now_and_ahead(EXTRA[::-1])
    for k in range(4):
        assert one.gain(k, 1e-3) == pytest.approx(two.gain(3 - k, 1e-3), rel=1e-9)


def test_expected_magnitude_is_that_of_the_truth() -> None:
    now, _ = now_and_ahead(EXTRA)
    true = simulated(TRUTH, bands="V", phases=[3.0]).mag[0]
    assert expected_mag(now, "V", TRUTH["t_max"] + 3.0 * TIME_STRETCH) == pytest.approx(true, abs=0.05)


def test_too_few_points_give_no_posterior() -> None:
    assert solved_curve(simulated(TRUTH, bands="B", phases=[0.0, 3.0]), target()) is None
