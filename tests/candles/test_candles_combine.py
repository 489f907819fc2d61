"""Several indicators of one galaxy: the mean, and what they share."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.candles.combine import Indicator, combined


def test_independent_moduli_are_weighted_by_their_errors():
    # AVG-01 of the check values: w = 1/σ², mean Σ w x / Σ w, error 1/√Σ w
    found = combined([Indicator("a", 31.0, 0.1), Indicator("b", 31.3, 0.2)])
    assert found.mu == pytest.approx(31.06)
    assert found.err == pytest.approx(0.1 * 0.2 / np.hypot(0.1, 0.2))
    assert found.weights == pytest.approx((0.8, 0.2))
    assert found.chi2 == pytest.approx(0.3**2 / 0.05)
    assert any("not independent" in note for note in found.notes)


def test_an_error_that_all_share_never_averages_down():
    many = [Indicator(str(k), 31.0, 0.1, {"anchor": 0.03}) for k in range(400)]
    found = combined(many)
    assert found.err_shared == pytest.approx(0.03)
    assert found.err == pytest.approx(np.hypot(0.1 / 20.0, 0.03))
    assert not found.notes


def test_the_mean_is_that_of_drawn_moduli():
    """Against a plain simulation: errors drawn with their shared parts, combined a thousand times."""
    generator = np.random.default_rng(12)
    shared = [{"dust": 0.05, "anchor": 0.03}, {"dust": 0.02, "anchor": 0.03}, {"dust": -0.04}]
    own = [0.06, 0.1, 0.08]
    found = []
    for _ in range(2000):
        dust, anchor = generator.standard_normal(2)
        rows = [
            Indicator(str(k), 30.0 + own[k] * generator.standard_normal() + dust * part.get("dust", 0.0)
                      + anchor * part.get("anchor", 0.0), own[k], part)
            for k, part in enumerate(shared)
        ]  # fmt: skip
        found.append(combined(rows))
    mu = np.array([one.mu for one in found])
    assert mu.mean() == pytest.approx(30.0, abs=0.005)
    assert mu.std() == pytest.approx(found[0].err, rel=0.05)
    assert np.mean([one.chi2 for one in found]) == pytest.approx(2.0, rel=0.1)
    assert np.std([one.pulls[2] for one in found]) == pytest.approx(1.0, rel=0.06)


def test_disagreement_is_said_and_widens_their_own_error_only():
    found = combined([Indicator("a", 31.0, 0.05, {"x": 0.02}), Indicator("b", 31.5, 0.05, {"x": 0.02})])
    assert len([note for note in found.notes if "σ from the mean" in note]) == 2
    assert found.err_scaled == pytest.approx(np.sqrt(found.err_own**2 * found.chi2 + 0.02**2))


@given(st.lists(st.tuples(st.floats(20, 40), st.floats(0.01, 1.0), st.floats(-0.3, 0.3)), min_size=1, max_size=6))
def test_parts_add_up_and_weights_to_one(rows):
    found = combined([Indicator(str(k), mu, err, {"s": part}) for k, (mu, err, part) in enumerate(rows)])
    assert found.err**2 == pytest.approx(found.err_own**2 + found.err_shared**2)
    assert sum(found.weights) == pytest.approx(1.0)
    assert found.err_scaled >= found.err - 1e-12


def test_nothing_to_combine_is_refused():
    with pytest.raises(ValueError, match="errors above 0"):
        combined([])
    with pytest.raises(ValueError, match="errors above 0"):
        combined([Indicator("a", 31.0, 0.0)])
