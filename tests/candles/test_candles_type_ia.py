"""The type Ia fit against the model it must recover, and what must not change its answer."""

from dataclasses import replace

import numpy as np
import pytest
from candle_light_curves import TRUTH, joined, light_curve, model_mag, simulated, taken, target
from hypothesis import given, settings
from hypothesis import strategies as st

from reduce.candles import type_ia
from reduce.candles.assumptions import Assumptions
from reduce.candles.budget import total_error
from reduce.candles.model import type_ia_model
from reduce.candles.points import select
from reduce.candles.posterior import Data, Nodes, evaluate, system_at
from reduce.candles.solve import separate_maxima

CLEAN = simulated(TRUTH)
EVERY = np.arange(len(CLEAN))


def names(estimate):
    return {caution.name for caution in estimate.warnings}


# ---- recovery --------------------------------------------------------------------------------------------


def test_a_clean_light_curve_gives_its_parameters_back():
    estimate = type_ia.fit(CLEAN, target())
    assert estimate.t_max == pytest.approx(TRUTH["t_max"], abs=0.1)
    assert estimate.dm15 == pytest.approx(TRUTH["dm15"], abs=0.02)
    assert estimate.e_host == pytest.approx(TRUTH["e_host"], abs=0.02)
    assert estimate.mu == pytest.approx(TRUTH["mu"], abs=0.03)
    assert estimate.chi2 < 0.2 * estimate.n
    assert estimate.verdict == "μ stands"
    assert estimate.n == len(CLEAN)


def drawn(generator, truth, phases):
    """A light curve with every scatter that the model claims, drawn from the written equations."""
    model = type_ia_model()
    curve = simulated(truth, phases=phases, err=0.02)
    phase = (curve.mjd - truth["t_max"]) / (1.0 + truth["z"])
    sigma = np.array(
        [np.interp(p, model.phases, model.template_scatter[b]) for p, b in zip(phase, curve.band, strict=True)]
    )
    same = curve.band[:, None] == curve.band[None, :]
    cov = np.outer(sigma, sigma) * np.exp(-np.abs(phase[:, None] - phase[None, :]) / 7.0) * np.where(same, 1, 0.3)
    colour = np.array([model.scatter.colour[b] ** 2 + 0.015**2 for b in curve.band])
    cov += np.where(same, colour[:, None], 0.0) + np.diag(np.full(len(phase), 0.02**2 + 0.012**2))
    return replace(curve, mag=curve.mag + generator.multivariate_normal(np.zeros(len(phase)), cov))


def test_errors_are_as_large_as_the_differences_from_the_truth():
    generator = np.random.default_rng(20310)
    pulls = []
    for _ in range(80):
        truth = dict(TRUTH)
        truth["dm15"] = float(generator.uniform(0.9, 1.5))
        truth["e_host"] = float(generator.exponential(0.108))
        truth["t_max"] = 60000.0 + float(generator.uniform(0.0, 10.0))
        estimate = type_ia.fit(drawn(generator, truth, np.arange(-7.0, 40.0, 3.5)), target())
        pulls.append(
            [
                (estimate.mu - truth["mu"]) / estimate.mu_err_fit,
                (estimate.t_max - truth["t_max"]) / estimate.t_max_err,
                (estimate.dm15 - truth["dm15"]) / estimate.dm15_err,
            ]
        )
    pulls = np.array(pulls)
    # 80 pulls of a unit normal: mean within 0.34 and spread within 0.76 to 1.24, both at 3 σ
    assert np.abs(pulls.mean(axis=0)).max() < 0.34
    assert 0.76 < pulls.std(axis=0).min() <= pulls.std(axis=0).max() < 1.24


# ---- what must not matter, and what must move μ in a known way -------------------------------------------


@settings(max_examples=8, deadline=None)
@given(shift=st.floats(-3.0, 3.0))
def test_shifting_all_magnitudes_shifts_the_modulus(shift):
    before = type_ia.fit(CLEAN, target())
    moved = light_curve(CLEAN.mjd, CLEAN.band, CLEAN.mag + shift, CLEAN.err)
    after = type_ia.fit(moved, target())
    assert after.mu - before.mu == pytest.approx(shift, abs=1e-6)
    assert after.t_max == pytest.approx(before.t_max, abs=1e-6)
    assert after.mu_err == pytest.approx(before.mu_err, abs=1e-6)


@settings(max_examples=8, deadline=None)
@given(days=st.integers(-3000, 3000))
def test_shifting_time_shifts_the_maximum(days):
    before = type_ia.fit(CLEAN, target())
    moved = light_curve(CLEAN.mjd + days, CLEAN.band, CLEAN.mag, CLEAN.err)
    after = type_ia.fit(moved, target())
    assert after.t_max - before.t_max == pytest.approx(days, abs=1e-5)
    assert after.mu == pytest.approx(before.mu, abs=1e-6)


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_the_order_of_points_does_not_matter(seed):
    generator = np.random.default_rng(5)
    noisy = simulated(TRUTH, noise=generator)
    order = np.random.default_rng(seed).permutation(len(noisy))
    one, two = type_ia.fit(noisy, target()), type_ia.fit(taken(noisy, order), target())
    assert (one.mu, one.mu_err, one.t_max, one.dm15, one.chi2) == (
        two.mu,
        two.mu_err,
        two.t_max,
        two.dm15,
        two.chi2,
    )


def test_a_point_split_into_two_of_the_same_information_does_not_matter():
    nugget = type_ia_model().scatter.nugget
    noisy = simulated(TRUTH, noise=np.random.default_rng(8))
    twice = taken(noisy, np.repeat(np.arange(len(noisy)), 2))
    # two points of variance 2 v weigh as one of variance v, the nugget included
    split = replace(twice, err=np.sqrt(2.0 * (twice.err**2 + nugget**2) - nugget**2))
    one, two = type_ia.fit(noisy, target()), type_ia.fit(split, target())
    assert two.mu == pytest.approx(one.mu, abs=0.002)
    assert two.mu_err_fit == pytest.approx(one.mu_err_fit, abs=0.002)
    assert two.t_max == pytest.approx(one.t_max, abs=0.02)


def test_the_milky_way_scale_is_converted_once():
    sf11 = type_ia.fit(CLEAN, target(ebv_mw=0.086, scale="SF11"))
    sfd = type_ia.fit(CLEAN, target(ebv_mw=0.100, scale="SFD"))
    assert sfd.mu == pytest.approx(sf11.mu, abs=1e-9)
    assert type_ia.fit(CLEAN, target(ebv_mw=0.100, scale="SF11")).mu < sf11.mu - 0.005


def test_the_modulus_falls_by_about_1_1_for_a_magnitude_of_milky_way_reddening():
    # from the model's description: dμ/dE_MW is about -1.1
    slope = (type_ia.fit(CLEAN, target(ebv_mw=0.04)).mu - type_ia.fit(CLEAN, target(ebv_mw=0.02)).mu) / 0.02
    assert slope == pytest.approx(-1.1, abs=0.4)


def test_another_h0_moves_the_modulus_and_says_so():
    here, there = type_ia.fit(CLEAN, target()), type_ia.fit(CLEAN, target(), Assumptions(h0=67.4))
    # arithmetic: 5 log10(73.04/67.4)
    assert there.mu - here.mu == pytest.approx(0.17450, abs=1e-5)
    assert "73.04" in here.scale
    assert "67.40" in there.scale
    assert there.peak_mag == here.peak_mag


# ---- errors and budget -----------------------------------------------------------------------------------


def line(estimate, start):
    return next(line.mag for line in estimate.budget if line.component.startswith(start))


@pytest.mark.parametrize("ebv_mw", [0.03, None])
@pytest.mark.parametrize("z", [0.02, None])
def test_the_budget_adds_up(ebv_mw, z):
    estimate = type_ia.fit(CLEAN, target(z=z, ebv_mw=ebv_mw))
    assert total_error(estimate.budget) == pytest.approx(estimate.mu_err, rel=1e-12)
    assert estimate.mu_err**2 - estimate.mu_err_fit**2 == pytest.approx(0.1062**2, rel=1e-9)
    assert all(part.mag >= 0 for part in estimate.budget)


def test_an_error_shared_by_a_band_never_averages_down():
    few = simulated(TRUTH, bands="BV", phases=np.arange(-6.0, 30.0, 6.0), err_band=0.1)
    many = simulated(TRUTH, bands="BV", phases=np.arange(-6.0, 30.0, 1.0), err_band=0.1)
    assert line(type_ia.fit(many, target()), "band zero") > 0.9 * line(type_ia.fit(few, target()), "band zero")
    assert line(type_ia.fit(many, target()), "band zero") > 3 * line(type_ia.fit(CLEAN, target()), "band zero")


def test_an_error_shared_by_a_night_averages_over_nights_only():
    phases = np.repeat(np.arange(-6.0, 30.0, 6.0), 4)
    shared = simulated(TRUTH, bands="BV", phases=phases, err_night=0.08)
    alone = simulated(TRUTH, bands="BV", phases=phases, err=np.hypot(0.02, 0.08))
    assert line(type_ia.fit(shared, target()), "photometry") > 1.5 * line(type_ia.fit(alone, target()), "photometry")


def test_stated_band_errors_replace_the_default():
    default, stated = (
        type_ia.fit(CLEAN, target()),
        type_ia.fit(replace(CLEAN, err_band=np.full(len(CLEAN), 0.015)), target()),
    )
    assert stated.mu == default.mu
    red = simulated(TRUTH, bands="VRI")
    wide = type_ia.fit(replace(red, err_band=np.full(len(red), 0.03)), target())
    assert wide.mu_err == type_ia.fit(red, target()).mu_err


def test_unknown_reddening_is_named_and_costs_error():
    known, unknown = type_ia.fit(CLEAN, target(ebv_mw=0.0)), type_ia.fit(CLEAN, target(ebv_mw=None))
    assert unknown.mu == known.mu
    assert unknown.mu_err > known.mu_err
    assert "reddening_unknown" in names(unknown) - names(known)
    assert line(unknown, "Milky Way") == pytest.approx(0.05 * 1.1, abs=0.03)


# ---- outliers, limits ------------------------------------------------------------------------------------


def test_an_outlier_is_marked_and_kept_in_the_list():
    bad = CLEAN.mag.copy()
    bad[7] -= 1.5
    estimate = type_ia.fit(replace(CLEAN, mag=bad), target())
    rejected = [point for point in estimate.points if point.rejected]
    assert [(point.mjd, point.band) for point in rejected] == [(CLEAN.mjd[7], CLEAN.band[7])]
    assert len(estimate.points) == len(CLEAN)
    assert estimate.n == len(CLEAN) - 1
    assert estimate.mu == pytest.approx(type_ia.fit(CLEAN, target()).mu, abs=0.02)


def with_limits(curve, mjd, band, flux, flux_err):
    extra = light_curve(mjd, band, np.full(len(mjd), np.nan), np.full(len(mjd), np.nan), flux=flux, flux_err=flux_err)
    return joined(curve, extra)


def test_an_early_limit_narrows_the_time_of_maximum():
    late = simulated(TRUTH, bands="BV", phases=np.array([12.0, 14.0, 17.0, 20.0]), err=0.1)
    before = type_ia.fit(late, target())
    faint = 10.0 ** (-0.4 * (21.5 - 25.0)) / 3.0
    times = TRUTH["t_max"] + np.array([-20.0, -19.0, -18.5]) * 1.02
    after = type_ia.fit(with_limits(late, times, "BBV", np.zeros(3), np.full(3, faint)), target())
    assert after.t_max_err < before.t_max_err
    assert after.t_max == pytest.approx(TRUTH["t_max"], abs=3.0 * after.t_max_err)
    assert after.n == before.n


def test_limits_that_say_nothing_change_nothing():
    times = TRUTH["t_max"] + np.array([-60.0, -50.0])
    with_nothing = with_limits(CLEAN, times, "BV", np.zeros(2), np.full(2, 1e6))
    assert type_ia.fit(with_nothing, target()).mu == pytest.approx(type_ia.fit(CLEAN, target()).mu, abs=0.003)


def test_the_flux_likelihood_equals_a_brute_force_integral():
    """(μ, E) moments at one grid node against a plain two-dimensional sum over the written equations."""
    model = type_ia_model()
    few = simulated(TRUTH, bands="BV", phases=[2.0, 9.0, 16.0], err=0.15, err_band=0.02)
    few = replace(few, mag=few.mag + np.array([0.1, -0.1, 0.05, 0.1, 0.0, -0.05]))
    faint = simulated(TRUTH, bands="B", phases=[22.0, 27.0, 33.0], err=0.45, err_band=0.02)
    faint = replace(faint, flux=faint.flux * np.array([1.3, 0.7, 1.4]))
    mags, fluxes = select(joined(few, faint), model)
    assert (len(mags), len(fluxes)) == (6, 3)
    ebv, z, t_max, dm15 = TRUTH["ebv_mw"], TRUTH["z"], TRUTH["t_max"], 1.2
    dust = np.array([model.mw_coefficients[band] for band in mags.band])
    data = Data(replace(mags, value=mags.value - dust * ebv), fluxes, z, ebv, model)
    system = system_at(data, np.ones(6, bool), t_max)
    node = evaluate(system, data, np.array([t_max]), np.array([dm15]))

    mu, e = np.meshgrid(np.linspace(33.0, 36.0, 601), np.linspace(0.0, 1.5, 601), indexing="ij")

    def predicted(points):
        shape = {"t_max": t_max, "dm15": dm15, "z": z, "ebv_mw": ebv, "mu": 0.0, "e_host": 0.0}
        mag = [float(model_mag(b, [t], **shape)[0]) for b, t in zip(points.band, points.mjd, strict=True)]
        r = [model.host_coefficient(str(b), z) for b in points.band]
        return np.array(mag), np.array(r)

    mag, r = predicted(mags)
    left = mags.value[:, None, None] - mag[:, None, None] - mu - r[:, None, None] * e
    inverse = np.linalg.inv(system.parts.total)
    ln_p = -0.5 * np.einsum("iab,ij,jab->ab", left, inverse, left) - e / 0.108 - 0.5 * e**2
    mag, r = predicted(fluxes)
    flux = 10.0 ** (-0.4 * (mag[:, None, None] + mu + r[:, None, None] * e - 25.0))
    phase = (fluxes.mjd - t_max) / (1.0 + z)
    scatter = np.interp(phase, model.phases, model.template_scatter["B"]) ** 2 + model.scatter.colour["B"] ** 2
    relative = np.sqrt(scatter + 0.012**2 + 0.02**2) / 1.0857362
    variance = fluxes.err[:, None, None] ** 2 + (flux * relative[:, None, None]) ** 2
    ln_p += (-0.5 * (fluxes.value[:, None, None] - flux) ** 2 / variance - 0.5 * np.log(variance)).sum(0)
    weight = np.exp(ln_p - ln_p.max())
    weight /= weight.sum()
    mean = float((weight * mu).sum())
    assert float(node.mu[0, 0]) == pytest.approx(mean, abs=0.01)
    sigma = float(np.sqrt((weight * (mu - mean) ** 2).sum()))
    assert float(np.sqrt(node.mu_var[0, 0])) == pytest.approx(sigma, rel=0.05)
    assert float(node.e[0, 0]) == pytest.approx(float((weight * e).sum()), abs=0.01)


def test_weak_detections_are_used_without_bias():
    weak = simulated(TRUTH, bands="BV", phases=np.arange(30.0, 60.0, 3.0), err=0.4)
    noise = np.random.default_rng(4).normal(0.0, 1.0, len(weak)) * weak.flux_err
    joined = with_limits(CLEAN, weak.mjd, weak.band, weak.flux + noise, weak.flux_err)
    estimate = type_ia.fit(joined, target())
    assert estimate.mu == pytest.approx(type_ia.fit(CLEAN, target()).mu, abs=0.5 * estimate.mu_err_fit)
    assert total_error(estimate.budget) == pytest.approx(estimate.mu_err, rel=1e-12)


# ---- cannot tell yet, and cautions -----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("curve", "words"),
    [
        (taken(CLEAN, np.arange(0)), "0 usable points"),
        (taken(CLEAN, np.arange(2)), "2 usable points"),
        (light_curve([1.0, 2.0, 3.0, 4.0], "UUUU", [15.0] * 4, [0.02] * 4), "0 usable points"),
        (simulated(TRUTH, bands="V", phases=[-11.0, -10.0, -9.0]), "cannot tell yet"),
        (light_curve([100.0, 400.0, 900.0], "BBB", [15.0, 15.0, 15.0], [0.02] * 3), "cannot tell"),
        (
            light_curve(np.arange(60.0), "V" * 60, 15.0 + 2 * (np.arange(60) % 2), [0.02] * 60),
            "no normal type Ia",
        ),
    ],
)
def test_it_says_when_it_cannot_tell(curve, words):
    estimate = type_ia.fit(curve, target())
    assert estimate.mu is None
    assert estimate.mu_err is None
    assert estimate.budget == ()
    assert words in estimate.verdict


@pytest.mark.parametrize(
    ("name", "curve", "of"),
    [
        ("late_start", simulated(TRUTH, phases=np.arange(15.0, 50.0, 3.0)), target()),
        ("before_maximum", simulated(TRUTH, phases=np.arange(-11.0, -1.0, 1.0)), target()),
        ("single_band", simulated(TRUTH, bands="B"), target()),
        ("no_B_or_g", simulated(TRUTH, bands="VRI"), target()),
        ("dm15_outside", simulated({**TRUTH, "dm15": 1.78}), target()),
        ("high_extinction", simulated({**TRUTH, "e_host": 0.9}), target()),
        ("z_outside", simulated({**TRUTH, "z": 0.095}), target(z=0.095)),
        ("reddening_unknown", CLEAN, target(ebv_mw=None)),
        ("redshift_unknown", CLEAN, target(z=None)),
        ("type_assumed", CLEAN, target(spectroscopic_type=None)),
        ("band_ignored", replace(CLEAN, band=np.where(CLEAN.band == "I", "z", CLEAN.band)), target()),
        ("bad_chi2", replace(CLEAN, mag=CLEAN.mag + np.where(EVERY % 2, 0.09, -0.09)), target()),
        ("many_rejected", replace(CLEAN, mag=CLEAN.mag + np.where(EVERY % 6, 0.0, 1.2)), target()),
    ],
)  # fmt: skip
def test_cautions_are_named_where_they_belong(name, curve, of):
    assert not names(type_ia.fit(CLEAN, target()))
    estimate = type_ia.fit(curve, of)
    found = {caution.name: caution.evidence for caution in estimate.warnings}
    assert name in found
    assert found[name].endswith(".")


@settings(max_examples=60, deadline=None)
@given(
    rows=st.lists(
        st.tuples(
            st.floats(50000.0, 50100.0) | st.floats(allow_nan=True, allow_infinity=True),
            st.sampled_from(["B", "V", "R", "I", "g", "r", "i", "u", ""]),
            st.floats(-5.0, 30.0) | st.just(np.nan),
            st.floats(-1.0, 2.0) | st.just(np.nan),
            st.floats(0.0, 1.0) | st.just(np.nan),
        ),
        max_size=14,
    ),
    z=st.none() | st.floats(0.0, 0.1),
    ebv_mw=st.none() | st.floats(0.0, 1.0),
)
def test_any_points_give_an_estimate_or_a_reason(rows, z, ebv_mw):
    columns = list(zip(*rows, strict=True)) or [()] * 5
    night = ["n"] * len(rows)
    curve = light_curve(*columns[:4], err_night=columns[4], err_band=columns[4], night=np.array(night, dtype="U1"))
    estimate = type_ia.fit(curve, target(z=z, ebv_mw=ebv_mw))
    if estimate.mu is None:
        assert estimate.verdict.startswith("cannot tell")
    else:
        assert np.isfinite([estimate.mu, estimate.mu_err, estimate.t_max, estimate.dm15, estimate.e_host]).all()
        assert total_error(estimate.budget) == pytest.approx(estimate.mu_err)


def test_points_of_other_years_cost_nothing_and_change_nothing():
    far = light_curve([20000.0, 99000.0], "BV", [15.0, 15.0], [0.02, 0.02])
    alone, both = type_ia.fit(CLEAN, target()), type_ia.fit(joined(CLEAN, far), target())
    assert both.mu == alone.mu
    assert both.n == alone.n


# ---- for drawing -----------------------------------------------------------------------------------------


def test_curves_pass_through_the_points_and_end_near_them():
    estimate = type_ia.fit(CLEAN, target())
    assert [curve.band for curve in estimate.curves] == ["B", "I", "R", "V"]
    for curve in estimate.curves:
        mine = CLEAN.band == curve.band
        fitted = np.interp(CLEAN.mjd[mine], curve.mjd, curve.mag)
        assert fitted == pytest.approx(CLEAN.mag[mine], abs=0.05)
        assert len(curve.mjd) == len(curve.mag) == len(curve.sigma_mag) == 200
        assert (curve.sigma_mag > 0).all()
        assert curve.mjd[0] >= CLEAN.mjd.min() - 12.01
        assert curve.mjd[-1] <= CLEAN.mjd.max() + 12.01
    at_peak = {c.band: float(np.interp(estimate.t_max, c.mjd, c.mag)) for c in estimate.curves}
    assert dict(estimate.peak_mag) == pytest.approx(at_peak, abs=0.01)


def test_the_curve_is_less_certain_where_no_point_is():
    estimate = type_ia.fit(simulated(TRUTH, bands="BV", phases=np.arange(-10.0, -1.0, 1.0)), target())
    curve = estimate.curves[0]
    seen = np.interp(TRUTH["t_max"] - 5.0, curve.mjd, curve.sigma_mag)
    assert np.interp(TRUTH["t_max"] + 9.0, curve.mjd, curve.sigma_mag) > 1.5 * seen


# ---- several maxima --------------------------------------------------------------------------------------


def two_peaks(apart, second):
    t = np.linspace(-8.0, 8.0, 81)
    p = np.exp(-0.5 * ((t + apart / 2) / 0.5) ** 2) + second * np.exp(-0.5 * ((t - apart / 2) / 0.5) ** 2)
    flat = np.zeros((81, 3))
    return Nodes(t, np.array([0.9, 1.0, 1.1]), np.log(p)[:, None] + flat, *[flat] * 5)


def test_a_second_time_of_maximum_is_seen():
    assert separate_maxima(two_peaks(6.0, 0.5)) == pytest.approx([-3.0, 3.0], abs=0.2)
    assert len(separate_maxima(two_peaks(6.0, 0.01))) == 1
    assert len(separate_maxima(two_peaks(2.0, 0.5))) == 1
    assert len(separate_maxima(two_peaks(0.0, 0.5))) == 1


def test_a_light_curve_without_rise_knows_its_maximum_less_well():
    late = simulated(TRUTH, phases=np.arange(1.0, 50.0, 1.0))
    early = simulated(TRUTH, phases=np.arange(-8.0, 50.0, 1.0))
    assert type_ia.fit(early, target()).t_max_err < 0.2
    assert 0.5 < type_ia.fit(late, target()).t_max_err < 1.0
