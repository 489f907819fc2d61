"""Points of several observatories in one fit, unknown passbands, and draws from the posterior."""

from dataclasses import replace

import numpy as np
import pytest
from candle_light_curves import TRUTH, joined, light_curve, simulated, target
from scipy.stats import truncnorm

from reduce.candles import type_ia
from reduce.candles.assumptions import Assumptions
from reduce.candles.model import type_ia_model
from reduce.candles.points import SOURCE_OFFSET, select
from reduce.candles.posterior import Data, Nodes, evaluate, residuals, system_at
from reduce.candles.sampling import PARAMETERS, draw

OWN = simulated(TRUTH, bands="BV", phases=np.arange(-8.0, 40.0, 4.0))
NIGHTS = np.arange(-6.0, 38.0, 4.0)


def from_source(curve, name):
    return replace(curve, source=np.full(len(curve), name), by_colour_terms=np.zeros(len(curve), bool))


def shifted(offset, bands="BVRI"):
    other = simulated(TRUTH, bands=bands, phases=NIGHTS)
    return from_source(replace(other, mag=other.mag + np.where(other.band == "V", offset, 0.0)), "Beacon Hill")


def both(offset):
    return joined(from_source(OWN, ""), shifted(offset))


# ---- offsets ---------------------------------------------------------------------------------------------


def test_the_offset_of_another_observatory_is_found():
    estimate = type_ia.fit(both(0.08), target(), Assumptions(without=frozenset({"offsets"})))
    found = {(o.source, o.band): o for o in estimate.offsets}
    assert sorted(found) == [("Beacon Hill", band) for band in "BIRV"]
    assert found["Beacon Hill", "V"].mag == pytest.approx(0.08, abs=0.02)
    assert found["Beacon Hill", "B"].mag == pytest.approx(0.0, abs=0.02)
    assert found["Beacon Hill", "V"].err < 0.05
    assert found["Beacon Hill", "V"].n == len(NIGHTS)
    assert estimate.mu == pytest.approx(TRUTH["mu"], abs=0.04)


def test_the_prior_holds_an_offset_back():
    held = {o.band: o for o in type_ia.fit(both(0.08), target()).offsets}
    free = {o.band: o for o in type_ia.fit(both(0.08), target(), Assumptions(without=frozenset({"offsets"}))).offsets}
    assert held["V"].prior_mag == SOURCE_OFFSET
    assert 0.03 < held["V"].mag < free["V"].mag


def test_marginalised_offsets_equal_offsets_that_are_fitted():
    """o and its error against a plain least-squares solution with one more unknown, at fixed t_max and Δm15."""
    estimate = type_ia.fit(both(0.05), target())
    model = type_ia_model()
    mags, _ = select(both(0.05), model)
    dust = np.array([model.mw_coefficients[band] for band in mags.band])
    undusted, no_fluxes = replace(mags, value=mags.value - dust * TRUTH["ebv_mw"]), mags.take(np.zeros(len(mags), bool))
    data = Data(undusted, no_fluxes, TRUTH["z"], TRUTH["ebv_mw"], model)
    system = system_at(data, np.ones(len(mags), bool), estimate.t_max)
    node = evaluate(system, data, np.array([estimate.t_max]), np.array([estimate.dm15]))
    left = residuals(system, data, estimate.t_max, estimate.dm15, float(node.mu[0, 0]), float(node.e[0, 0]))
    mine = (mags.source == "Beacon Hill") & (mags.band == "V")
    without = system.parts.total - SOURCE_OFFSET**2 * np.outer(mine, mine)
    design = np.column_stack([np.ones(len(mags)), system.dust, mine.astype(float)])
    inverse = np.linalg.inv(without)
    normal = design.T @ inverse @ design + np.diag([0.0, 1.0, SOURCE_OFFSET**-2])
    solution = np.linalg.solve(normal, design.T @ inverse @ left)
    offset = next(o for o in estimate.offsets if o.band == "V")
    # the node is at the mean of the posterior here and at its peak there; both are the truth within 2 mmag
    assert offset.mag == pytest.approx(solution[2], abs=0.004)
    assert offset.err == pytest.approx(np.sqrt(np.linalg.inv(normal)[2, 2]), rel=0.02)


def test_one_source_alone_has_no_offset_and_changes_nothing():
    named = type_ia.fit(from_source(OWN, "Beacon Hill"), target())
    assert named.offsets == ()
    assert (named.mu, named.mu_err) == (type_ia.fit(OWN, target()).mu, type_ia.fit(OWN, target()).mu_err)


def test_a_stated_error_of_a_band_is_the_prior():
    stated = replace(shifted(0.05), err_band=np.full(4 * len(NIGHTS), 0.1))
    estimate = type_ia.fit(joined(from_source(OWN, ""), stated), target())
    assert {o.prior_mag for o in estimate.offsets} == {0.1}


# ---- passbands -------------------------------------------------------------------------------------------


def test_unknown_passbands_cost_what_they_should():
    curve = simulated(TRUTH, bands="V", err=0.005)
    unknown = replace(curve, by_colour_terms=np.ones(len(curve), bool), source=np.full(len(curve), ""))
    known_err, unknown_err = (type_ia.fit(c, target()).mu_err for c in (curve, unknown))
    # one band: 0.03 mag common to all its points goes straight into μ
    assert unknown_err**2 - known_err**2 == pytest.approx(0.03**2, rel=0.2)


# ---- draws -----------------------------------------------------------------------------------------------


def test_draws_have_the_moments_of_the_fit():
    estimate = type_ia.fit(OWN, target())
    draws = type_ia.draws(OWN, target(), 20000, np.random.default_rng(5))
    for k, (value, err) in enumerate(
        [
            (estimate.mu, estimate.mu_err),
            (estimate.e_host, estimate.e_host_err),
            (estimate.t_max, estimate.t_max_err),
            (estimate.dm15, estimate.dm15_err),
        ]
    ):
        assert draws[:, k].mean() == pytest.approx(value, abs=0.04 * err)
        assert draws[:, k].std() == pytest.approx(err, rel=0.04)
    assert (draws[:, 1] >= 0).all()
    correlation = np.corrcoef(draws.T)
    assert correlation == pytest.approx(np.array(estimate.posterior.correlation), abs=0.05)
    assert estimate.posterior.parameters == PARAMETERS
    for row, column in zip(estimate.posterior.quantiles, draws.T, strict=True):
        assert row == pytest.approx(np.quantile(column, estimate.posterior.probabilities), abs=0.1 * column.std())


@pytest.mark.parametrize("cut", [-3.0, -0.5, 1.0, 6.0])
def test_dust_is_drawn_from_the_cut_normal_of_its_node(cut):
    """One node whose host E(B-V) is N(0.1 cut, 0.1) cut at zero, against the library's truncated normal."""
    law = truncnorm(-cut, np.inf, loc=0.1 * cut, scale=0.1)
    one = np.full((2, 2), 1.0)
    ln_p = np.array([[0.0, -50.0], [-50.0, -50.0]])
    nodes = Nodes(np.array([0.0, 1.0]), np.array([1.0, 1.1]), ln_p, 34.0 * one, 0.01 * one, law.mean() * one,
                  law.var() * one, -0.5 * law.var() * one)  # fmt: skip
    found = draw(nodes, 20000, np.random.default_rng(2))
    assert np.quantile(found[:, 1], [0.1, 0.5, 0.9]) == pytest.approx(law.ppf([0.1, 0.5, 0.9]), abs=0.03 * law.std())
    assert np.cov(found[:, 0], found[:, 1])[0, 1] == pytest.approx(-0.5 * law.var(), rel=0.15)


def test_equal_light_curves_give_equal_posteriors():
    assert type_ia.fit(OWN, target()).posterior == type_ia.fit(OWN, target()).posterior


# ---- faint magnitudes ------------------------------------------------------------------------------------


def test_magnitudes_of_noisy_fluxes_do_not_draw_the_fit_to_bright_values():
    """Weighted mean of 20 000 magnitudes whose fluxes have S/N 8: the truth, and not 1.5 · 1.0857 / 64 brighter."""
    flux = 1000.0 * (1.0 + np.random.default_rng(6).standard_normal(20000) / 8.0)
    mag, err = 25.0 - 2.5 * np.log10(flux), 1.0857362 * 125.0 / flux
    seen = err < 1.0857362 / 5.0
    curve = light_curve(np.full(seen.sum(), 60000.0), ["V"] * int(seen.sum()), mag[seen], err[seen])
    points, _ = select(curve, type_ia_model())

    def off(values, errors):
        return float(np.average(values, weights=errors**-2.0)) - 17.5

    assert off(mag[seen], err[seen]) < -0.02
    assert abs(off(points.value, points.err)) < 0.008


def test_weak_points_of_a_second_band_tell_how_dusty_the_host_is():
    dusty = {**TRUTH, "e_host": 0.6}
    one = simulated(dusty, bands="V", err=0.03)
    weak = simulated(dusty, bands="B", phases=np.arange(-8.0, 20.0, 1.0), err=0.3)
    alone, both_bands = type_ia.fit(one, target()), type_ia.fit(joined(one, weak), target())
    assert alone.e_host < 0.2
    assert both_bands.e_host == pytest.approx(0.6, abs=2.0 * both_bands.e_host_err)
    assert both_bands.e_host_err < 0.12
    assert both_bands.n == alone.n
