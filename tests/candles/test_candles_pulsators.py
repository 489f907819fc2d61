"""Cepheids and RR Lyrae stars from points to modulus, on invented stars of known distance."""

import dataclasses

import numpy as np
import pytest
from candle_light_curves import joined, taken
from pulsating_stars import SAW, SINE, night_times, star, target, true_mean

from reduce.candles.candle import candle_for
from reduce.candles.population import FIRST_OVERTONE
from reduce.candles.relations import calibrations, log_z, wesenheit
from reduce.logbook.packing import estimate_from_json, to_json
from reduce.records import LightCurve

PERIOD = 5.37


@pytest.fixture(scope="module")
def curve():
    rng = np.random.default_rng(20)
    return star(night_times(45, rng, 160.0), PERIOD, rng=rng, err=0.01)


def fit(curve, kind="cepheid", **facts):
    return candle_for(kind).fit(curve, target(kind, **facts))


def true_modulus(name="OGLE-III LMC", period=PERIOD):
    calibration = calibrations()[name]
    relation = calibration.bands["W"]
    w = wesenheit(true_mean("V"), true_mean("I"), relation.r)
    return w - relation.absolute_mag(np.log10(period), 0.0)


def test_a_cepheid_of_known_distance(curve):
    found = fit(curve, metallicity_dex=-0.30)
    assert found.mu == pytest.approx(true_modulus(), abs=0.02)
    star_found = found.pulsation
    assert star_found.period_d == pytest.approx(PERIOD, abs=4 * star_found.period_err_d)
    assert star_found.mode == "fundamental"
    assert star_found.coverage == 1.0
    assert star_found.aliases[0].probability > 0.99
    assert [(mean.band, mean.covered) for mean in star_found.means] == [("I", True), ("V", True)]
    assert found.verdict == "μ stands"


def test_the_budget_adds_up_and_names_its_parts(curve):
    found = fit(curve, metallicity_dex=-0.30)
    assert np.sqrt(sum(line.mag**2 for line in found.budget)) == pytest.approx(found.mu_err)
    assert {line.component for line in found.budget} == {
        "mean magnitudes", "band zero points", "period", "metallicity", "metallicity term", "reddening law",
        "calibration", "single star",
    }  # fmt: skip
    single = next(line.mag for line in found.budget if line.component == "single star")
    assert found.mu_err_fit == pytest.approx(np.sqrt(found.mu_err**2 - single**2))


def test_the_index_is_free_of_dust(curve):
    # A_V : A_I = 2.55 : 1.55 for R = 1.55
    dusty = np.where(curve.band == "V", 2.55, 1.55) * 0.2
    reddened = dataclasses.replace(curve, mag=curve.mag + dusty)
    assert fit(reddened).mu == pytest.approx(fit(curve).mu, abs=1e-3)
    moduli = {m.band: m.mag for m in fit(reddened).pulsation.moduli}
    clean = {m.band: m.mag for m in fit(curve).pulsation.moduli}
    assert moduli["V"] - clean["V"] == pytest.approx(0.51, abs=1e-3)


def test_metal_rich_stars_are_farther_than_they_seem(curve):
    # γ < 0 raises μ of metal-richer targets (METHODS: γ = -0.2 of Freedman et al. 2001, ApJ 553, 47)
    poor, rich = (fit(curve, metallicity_dex=z, relation="Freedman 2001").mu for z in (-0.3, 0.1))
    assert rich - poor == pytest.approx(0.08, abs=1e-6)
    unknown = fit(curve)
    assert "metallicity_unknown" in {w.name for w in unknown.warnings}
    assert unknown.mu_err > fit(curve, metallicity_dex=-0.3, metallicity_err=0.05).mu_err


def test_a_named_relation_is_used_and_shown(curve):
    found = fit(curve, relation="Fouque 2007 Galaxy")
    assert found.pulsation.relation == "Fouque 2007 Galaxy"
    assert found.pulsation.provenance.endswith("from memory")
    assert found.scale.startswith("Fouque 2007 Galaxy: Galactic")
    assert found.mu != pytest.approx(fit(curve).mu, abs=0.01)
    other = fit(curve, relation="Muraveva 2018")
    assert "relation_not_used" in {w.name for w in other.warnings}


def test_one_band_gives_a_modulus_that_says_what_dust_may_hide(curve):
    only_v = taken(curve, np.flatnonzero(curve.band == "V"))
    found = fit(only_v, ebv_mw=0.05)
    assert found.mu_err > 0.3
    assert {"no_V_and_I"} <= {w.name for w in found.warnings}
    assert "dust of the host" in {line.component for line in found.budget}
    assert fit(only_v).mu - found.mu == pytest.approx(0.05 / 0.86 * 2.742, abs=1e-6)


def test_a_first_overtone_uses_its_own_relation():
    rng = np.random.default_rng(21)
    curve = star(night_times(60, rng, 200.0), 2.3, rng=rng, err=0.005, harmonics=((0.17, 0.3), (0.02, 1.0)))
    found = fit(curve)
    assert found.pulsation.mode == FIRST_OVERTONE.name
    relation = calibrations()["OGLE-III LMC"].overtone["W"]
    means = {m.band: m.mag for m in found.pulsation.means}
    expected = wesenheit(means["V"], means["I"], 1.55) - relation.absolute_mag(np.log10(found.pulsation.period_d), 0.0)
    assert found.mu == pytest.approx(expected)


@pytest.mark.parametrize(("period", "harmonics", "mode"), [(0.547, SAW, "RRab"), (0.331, SINE, "RRc")])
def test_rr_lyrae_stars_of_known_distance(period, harmonics, mode):
    rng = np.random.default_rng(22)
    curve = star(night_times(60, rng, 120.0), period, "VI", rng=rng, harmonics=harmonics)
    found = fit(curve, "rr_lyrae", metallicity_dex=-1.5, ebv_mw=0.10, ebv_scale="SFD")
    assert found.pulsation.mode == mode
    # M_V(-1.5) = 0.66 (Muraveva et al. 2018, MNRAS 481, 1195); A_V = 2.742 E (Schlafly & Finkbeiner 2011, Table 6)
    assert found.mu == pytest.approx(true_mean("V", harmonics) - 0.2742 - 0.66, abs=0.012)
    by_band = {m.band: m for m in found.pulsation.moduli}
    log_p = np.log10(period) + (0.127 if mode == "RRc" else 0.0)
    m_i = 0.471 - 1.132 * log_p + 0.205 * log_z(-1.5)  # Catelan et al. 2004, ApJS 154, 633
    assert by_band["I"].mag == pytest.approx(true_mean("I", harmonics) - 0.1505 - m_i, abs=0.012)
    assert np.sqrt(sum(line.mag**2 for line in found.budget)) == pytest.approx(found.mu_err)


def test_half_a_dozen_visits_cannot_tell():
    rng = np.random.default_rng(23)
    found = fit(star(night_times(6, rng, 40.0), PERIOD, rng=rng))
    assert found.mu is None
    assert found.verdict.startswith("cannot tell yet")
    assert found.mu_err is None


def test_less_than_a_cycle_cannot_tell():
    rng = np.random.default_rng(25)
    times = 2460000.6 + np.arange(20) + rng.uniform(0.0, 0.1, 20)
    found = fit(star(times, 33.0, rng=rng))
    assert found.mu is None
    assert found.verdict.startswith("cannot tell yet")


def test_limits_and_unknown_bands_do_not_disturb(curve):
    some = taken(curve, np.arange(4))
    limits = dataclasses.replace(some, mag=np.full(4, np.nan), flux=np.zeros(4))
    unknown = dataclasses.replace(some, band=np.array(["Q"] * 4))
    found = fit(joined(joined(curve, limits), unknown))
    assert found.mu == pytest.approx(fit(curve).mu)
    assert "band_ignored" in {w.name for w in found.warnings}


def test_nothing_at_all_is_a_sentence():
    nothing = LightCurve(*(np.zeros(0, t) for t in ("f8", "U2", "f8", "f8", "f8", "f8", "f8", "f8", "U9")))
    for kind in ("cepheid", "rr_lyrae"):
        found = fit(nothing, kind)
        assert found.mu is None
        assert found.verdict.startswith("cannot tell yet: 0 usable points")


def test_phases_need_barycentric_time():
    """The Earth's orbit moves UTC by up to 8 minutes: with it the folded curve of a short period is smeared."""
    rng = np.random.default_rng(24)
    times = np.sort(2460000.0 + rng.uniform(0, 700, 120))
    curve = star(times, 0.3521, "V", err=0.003, rng=rng, harmonics=SINE)
    orbit = 0.0055 * np.sin(2 * np.pi * (curve.bjd_tdb - 2460000.0) / 365.25)
    at_earth = dataclasses.replace(curve, mjd=curve.mjd - orbit)
    good = fit(at_earth, "rr_lyrae")
    bad = fit(dataclasses.replace(at_earth, bjd_tdb=None), "rr_lyrae")
    rms = [np.std([p.residual_mag for p in each.points]) for each in (good, bad)]
    assert rms[0] < 0.004
    assert rms[1] > 3.0 * rms[0]


def test_points_and_curves_are_for_drawing(curve):
    found = fit(curve)
    assert len(found.points) == len(curve)
    assert {c.band for c in found.curves} == {"V", "I"}
    assert all(np.ptp(c.mjd) == pytest.approx(found.pulsation.period_d) for c in found.curves)
    assert all(0.0 <= p.phase_d < found.pulsation.period_d for p in found.points)
    assert np.argmin(found.curves[0].mag) in (0, 1, 99, 100)  # phase 0 is maximum light
    assert sorted(p.mjd for p in found.points) == pytest.approx(sorted(curve.mjd.tolist()))


def test_an_estimate_survives_the_logbook(curve):
    found = fit(curve)
    back = estimate_from_json(to_json(found))
    assert back.pulsation == found.pulsation
    assert back.mu == found.mu


def test_the_order_of_the_points_does_not_matter(curve):
    shuffled = taken(curve, np.random.default_rng(1).permutation(len(curve)))
    assert fit(shuffled).mu == fit(curve).mu
    assert fit(shuffled).pulsation == fit(curve).pulsation
