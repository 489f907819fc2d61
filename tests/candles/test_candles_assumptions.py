"""The absolute scale, priors that can be switched off, and what the redshift says beside a distance."""

import json
from importlib.resources import files

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from candle_light_curves import TRUTH, simulated, target

from reduce.candles import type_ia
from reduce.candles.assumptions import MODEL_M_B, PRIORS, Assumptions
from reduce.candles.budget import total_error
from reduce.candles.hubble import cmb_redshift, hubble_expectation
from reduce.records import Target

CLEAN = simulated(TRUTH)


def test_the_stated_m_b_is_that_of_the_tables():
    params = json.loads((files("reduce.candles") / "tables" / "type_ia_params.json").read_text())
    assert params["M_abs"]["coef"]["B"][0] == MODEL_M_B


def test_another_scale_moves_mu_alone():
    own = type_ia.fit(CLEAN, target())
    h0 = type_ia.fit(CLEAN, target(), Assumptions(h0=70.0))
    # 5 log10(73.04 / 70) = 0.0923
    assert h0.mu - own.mu == pytest.approx(0.0923, abs=1e-4)
    m_b = type_ia.fit(CLEAN, target(), Assumptions(m_b=-19.3443))
    assert m_b.mu - own.mu == pytest.approx(0.1, abs=1e-9)
    for other in (h0, m_b):
        assert (other.mu_err, other.dm15, other.t_max) == (own.mu_err, own.dm15, own.t_max)
        assert total_error(other.budget) == pytest.approx(other.mu_err, rel=1e-12)
        assert other.posterior.quantiles[0][2] - own.posterior.quantiles[0][2] == pytest.approx(other.mu - own.mu)
    assert "70.00" in h0.scale
    assert "-19.344" in m_b.scale
    assert "73.04" in own.scale


def test_without_the_dust_prior_a_single_band_knows_less():
    one = simulated(TRUTH, bands="V")
    with_prior = type_ia.fit(one, target())
    without = type_ia.fit(one, target(), Assumptions(without=frozenset({"dust"})))
    assert with_prior.mu_err < 0.3
    assert without.mu is None or without.mu_err > 1.5 * with_prior.mu_err
    evidence = {caution.name: caution.evidence for caution in with_prior.warnings}
    assert "usually have" in evidence["single_band"]


def test_without_the_decline_rate_prior_two_nights_know_less():
    few = simulated(TRUTH, bands="BV", phases=np.array([-1.0, 4.0]), err=0.05)
    own, free = type_ia.fit(few, target()), type_ia.fit(few, target(), Assumptions(without=frozenset({"dm15"})))
    assert free.dm15_err > 1.1 * own.dm15_err


def test_without_the_grey_scatter_its_line_is_zero():
    own, free = type_ia.fit(CLEAN, target()), type_ia.fit(CLEAN, target(), Assumptions(without=frozenset({"grey"})))
    assert free.mu == own.mu
    assert free.mu_err == pytest.approx(own.mu_err_fit, rel=1e-9)


@pytest.mark.parametrize("name", PRIORS)
def test_every_prior_is_named_and_says_when_it_is_off(name):
    def sentence(assumptions):
        (found,) = (s for s in type_ia.fit(CLEAN, target(), assumptions).priors if s.startswith(f"{name}:"))
        return found

    assert "switched off" not in sentence(Assumptions())
    assert "switched off" in sentence(Assumptions(without=frozenset({name})))


@pytest.mark.parametrize(("ra", "dec"), [(0.0, 0.0), (168.0, -7.0), (150.1, 62.0), (330.0, -40.0)])
def test_the_cmb_frame_follows_the_dipole(ra, dec):
    # Planck Collaboration 2020 (A&A 641, A1): 369.82 km/s towards l = 264.021, b = 48.253, from memory
    apex = SkyCoord(l=264.021 * u.deg, b=48.253 * u.deg, frame="galactic").icrs
    cosine = np.cos(SkyCoord(ra * u.deg, dec * u.deg).separation(apex).rad)
    expected = 1.02 * (1.0 + 369.82 / 299792.458 * cosine) - 1.0
    assert cmb_redshift(0.02, ra, dec) == pytest.approx(expected, abs=3e-8)


def test_the_hubble_modulus_stands_beside_and_changes_nothing():
    near = target(z=0.02)
    here = type_ia.fit(CLEAN, near)
    assert here.hubble.frame == "CMB"
    # PEC-01 of the check values: 5 σ_v / (ln 10 c z), σ_v = 250 km/s
    assert here.hubble.mu_err == pytest.approx(5.0 / np.log(10.0) * 250.0 / (299792.458 * here.hubble.z))
    assert all("hubble" not in line.component.lower() for line in here.budget)
    unplaced = Target("Lantern 8", "type_ia", np.nan, np.nan, 0.05)
    # flat universe with Ω_m = 0.3 and H0 = 73.04: 36.64228 at z = 0.05 (astropy FlatLambdaCDM)
    assert hubble_expectation(unplaced, Assumptions()).mu == pytest.approx(36.64228, abs=3e-4)
    assert hubble_expectation(unplaced, Assumptions()).frame == "heliocentric"
    assert hubble_expectation(unplaced, Assumptions(h0=70.0)).mu == pytest.approx(36.73459, abs=3e-4)
    assert hubble_expectation(Target("Lantern 8", "type_ia", 1.0, 1.0, None), Assumptions()) is None
    assert hubble_expectation(Target("Lantern 8", "type_ia", np.nan, np.nan, 1e-4), Assumptions()) is None
