"""What part of a real light curve is enough; tests/type_ia_tables.py prints the whole tables.

Bounds are those the project was asked for, widened where a subset of n objects cannot tell them: the relative error of
a robust scatter is about 1.2 / sqrt(n), that of a share p is sqrt(p (1 - p) / n).
"""

import math

import pytest

from reduce.candles.type_ia import fit


@pytest.fixture(scope="module", params=[6, pytest.param(1, marks=pytest.mark.slow)])
def table(reference_folder, request):
    from supernova_samples import TypeIaSample
    from type_ia_tables import fill

    sample = TypeIaSample(reference_folder.parent)
    return fill(sample, sample.names(held_out=True)[:: request.param], "whole last first")


def scatter_bound(asked, n):
    return asked * (1.0 + 2.0 * 1.2 / math.sqrt(n))


def share_bound(asked, n):
    return asked - 2.0 * math.sqrt(asked * (1.0 - asked) / n)


def test_whole_light_curves(table):
    found = table.figures("whole")
    n = found["n"]
    assert n >= 20
    assert found["silent"] == 0
    assert found["scatter"] <= scatter_bound(0.135, n)
    assert found["listed"] <= scatter_bound(0.080, n)
    assert abs(found["bias"]) <= 0.02 + 2.0 * 1.25 * 0.126 / math.sqrt(n)
    assert share_bound(0.65, n) <= found["within_1"] <= 1.0 - share_bound(0.22, n)


@pytest.mark.parametrize("line", ["until +5 d", "until +10 d", "until +15 d", "until +20 d", "until +30 d"])
def test_data_that_end(table, line):
    found = table.figures(line)
    assert found["velocity_removed"] <= scatter_bound(0.126, found["n"])
    assert found["within_1"] >= share_bound(0.68, found["n"])


@pytest.mark.parametrize(("line", "asked"), [("from +5 d", 0.13), ("from +10 d", 0.13), ("from +15 d", 0.145),
                                             ("from +20 d", 0.145)])  # fmt: skip
def test_data_that_begin_late(table, line, asked):
    found = table.figures(line)
    assert found["velocity_removed"] <= scatter_bound(asked, found["n"])
    assert found["t_within_1"] >= share_bound(0.65, found["n"])


def test_cuts_lose_nothing_to_a_crash(reference_folder):
    from supernova_samples import TypeIaSample, four_nights

    sample = TypeIaSample(reference_folder.parent)
    for name in sample.names(held_out=True)[::10]:
        target, curve = sample.curve(name)
        assert fit(four_nights(curve, name), target).verdict
