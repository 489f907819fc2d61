"""Simulation-based calibration on a few dozen invented supernovae; tests/type_ia_calibration.py does it at length."""

import pytest
from scipy.stats import kstest
from simulated_supernovae import ranks


def check(found):
    for k in range(4):
        # the probability of so uneven ranks by chance is 0.002 for each parameter if the posterior is right
        assert kstest(found[:, k], "uniform").pvalue > 0.002


def test_ranks_of_the_truth_are_uniform():
    found, silent = ranks(50, seed=3)
    assert silent < 10
    check(found)


@pytest.mark.slow
def test_ranks_of_the_truth_are_uniform_at_length():
    found, silent = ranks(300, seed=4)
    assert silent < 45
    check(found)
