"""Gain, read noise and digitisation against published relations; each row names its source."""

from __future__ import annotations

import numpy as np
import pytest

from reduce.frames.combine import combine, typical_sigma
from reduce.frames.detector import DIGITISATION_ADU, gain_from_pairs, pair_statistics, read_noise_from_pair

# CCD-08: two-flat, two-bias photon transfer, Howell, Handbook of CCD Astronomy (from memory); arithmetic
PAIRS = ((20010.0, 19990.0), (1001.0, 999.0), 200.0, 7.0)


def test_digitisation():
    assert pytest.approx(0.28868, abs=1e-4) == DIGITISATION_ADU  # CCD-07: standard deviation of a uniform distribution
    rounding = np.random.default_rng(1).uniform(0, 100, 400_000)
    assert np.std(rounding - np.rint(rounding)) == pytest.approx(DIGITISATION_ADU, rel=0.01)


def test_gain_from_pairs():
    assert gain_from_pairs(*PAIRS) == pytest.approx(0.95117, abs=1e-4)  # CCD-08


def test_read_noise_from_pair():
    assert read_noise_from_pair(7.0, gain_from_pairs(*PAIRS)) == pytest.approx(4.7080, abs=1e-3)  # CCD-09: as CCD-08


def test_flat_noise_of_sixteen_flats():
    # CCD-10: Poisson arithmetic; 16 flats of 30,000 e- a pixel, a star on 4 pixels at one position: 0.000784 mag
    rng = np.random.default_rng(2)
    stack = (rng.poisson(30000.0, (16, 300, 300)) / 30000.0).astype(np.float32)
    mean, variance = combine(stack)
    per_pixel = typical_sigma(variance, 16) / 4.0
    assert 1.0857 * per_pixel / 2.0 == pytest.approx(0.000784, rel=0.01)
    over_four = mean.reshape(150, 2, 150, 2).mean(axis=(1, 3))
    assert 1.0857 * over_four.std() == pytest.approx(0.000784, rel=0.02)


def test_simulated_pairs_give_their_gain_and_read_noise_back():
    rng, gain, read_noise_e = np.random.default_rng(3), 1.7, 9.0

    def frame(level_e: float) -> np.ndarray:
        pattern = np.random.default_rng(4).normal(1.0, 0.02, (500, 500))
        return np.rint((rng.poisson(level_e * pattern) + rng.normal(0, read_noise_e, (500, 500))) / gain + 1000.0)

    flats, flat_sd = pair_statistics(frame(40000.0), frame(39500.0))
    biases, bias_sd = pair_statistics(frame(0.0), frame(0.0))
    found = gain_from_pairs(flats, biases, flat_sd, bias_sd)
    assert found == pytest.approx(gain, rel=0.01)
    assert read_noise_from_pair(bias_sd, found) == pytest.approx(read_noise_e, rel=0.01)


@pytest.mark.parametrize("pairs", [((1000.0, 1000.0), (1000.0, 1000.0), 9.0, 7.0), ((2e4, 2e4), (1e3, 1e3), 7.0, 7.0)])
def test_pairs_that_say_nothing_are_refused(pairs):
    with pytest.raises(ValueError, match="brighter and noisier"):
        gain_from_pairs(*pairs)
