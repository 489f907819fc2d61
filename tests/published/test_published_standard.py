"""Check values of transformation, zero points, extinction, limits and combining, each with its source."""

from __future__ import annotations

import numpy as np
import pytest

from reduce.curve.combine import combine
from reduce.curve.limits import asymmetric_errors, limiting_magnitude
from reduce.standard.colour import colour_coefficient, solve_colour, to_standard
from reduce.standard.extinction import above_atmosphere, fit_extinction
from reduce.standard.scatter import additive_floor
from reduce.standard.zeropoint import JointSolution, solve_zero_points

# Landolt 1992 (AJ 104, 340; CDS II/183A, table 2): name, V, B-V.
LANDOLT = (
    ("98 650", 12.271, 0.157),
    ("98 670", 11.930, 1.356),
    ("98 671", 13.385, 0.968),
    ("98 675", 13.398, 1.909),
    ("98 685", 11.954, 0.463),
    ("98 978", 10.572, 0.609),
    ("RU 149", 13.866, -0.129),
    ("RU 149F", 13.471, 1.115),
    ("104 598", 11.479, 1.106),
    ("114 750", 11.916, -0.041),
)


def one(value: float) -> np.ndarray:
    return np.array([value])


def transform() -> dict[str, float]:
    """Hardie's scheme with b, v at X = 1.35; k″ of V is 0."""
    airmass = 1.35
    b = above_atmosphere(one(-7.610), 0.25, one(airmass), 0.0, one(0.0))[0]
    v = above_atmosphere(one(-8.523), 0.14, one(airmass), 0.0, one(0.0))[0]
    above = solve_colour(b, v, colour_coefficient(0.0, -0.03, airmass), 0.0)
    # B-V = 1.12 (b-v)0 - 0.05, written with terms of B and V that differ by 1 - 1/1.12.
    colour = solve_colour(above - 0.05 / 1.12, 0.0, 1 - 1 / 1.12, 0.0)
    return {
        "(b-v)0": above,
        "B-V": colour,
        "V": to_standard(v + 22.35, -0.045, colour),
        "k″ difference": -above_atmosphere(one(0.0), 0.0, one(airmass), -0.03, one(0.6))[0],
    }


@pytest.mark.parametrize(
    ("what", "expected"),
    [
        ("(b-v)0", 0.79677),  # TRF-01: Hardie 1962 (Astronomical Techniques, ch. 8), arithmetic of the scheme
        ("B-V", 0.84238),  # TRF-02: the same, B-V = 1.12 (b-v)0 - 0.05
        ("V", 13.60009),  # TRF-03: the same, V = v - 0.14 X - 0.045 (B-V) + 22.35
        ("k″ difference", -0.0243),  # TRF-04: k″ X Δ(B-V) = -0.03 · 1.35 · 0.6
    ],
)
def test_transformation(what: str, expected: float) -> None:
    assert transform()[what] == pytest.approx(expected, abs=1e-4)


def zp_01() -> JointSolution:
    v = np.array([-10.0679, -10.3650, -8.9114, -8.8741, -10.3732])
    err = np.array([0.005, 0.005, 0.012, 0.012, 0.005])
    catalogue = np.array([row[1] for row in LANDOLT[:5]])
    colour = np.array([row[2] for row in LANDOLT[:5]])
    return solve_zero_points((catalogue - v)[None], err[None], np.zeros(5), colour, np.array([True]), term=-0.045)


def test_zero_point_of_five_landolt_stars() -> None:
    # ZP-01: Landolt 1992 V, B-V (CDS II/183A), synthetic instrumental magnitudes; mean by arithmetic.
    solution = zp_01()
    assert solution.zp_mag[0] == pytest.approx(22.3499, abs=5e-4)
    assert solution.zp_err_mag[0] == pytest.approx(0.0027, abs=5e-5)
    assert solution.chi2_dof[0] * 4 == pytest.approx(3.38, abs=0.02)


def test_ensemble_of_honeycutt() -> None:
    # ENS-01: Honeycutt 1992 (PASP 104, 435), m(e,s) = m0(s) + em(e), sum of em = 0; solved independently.
    m = np.array([[12.000, 12.052, 11.981], [13.004, 13.051, 12.982], [14.010, np.nan, 13.985]]).T
    free = np.full(3, 300.0)  # a catalogue that says nothing
    solution = solve_zero_points(-m, np.full(m.shape, 0.01), free, np.zeros(3), np.ones(3, bool), term=0.0)
    em = solution.zp_mag.mean() - solution.zp_mag
    np.testing.assert_allclose(em, [-0.00892, 0.03983, -0.03092], atol=2e-5)
    star = solution.star_offset_mag - solution.star_offset_mag[0]
    np.testing.assert_allclose(star, np.array([12.01100, 13.01233, 14.01742]) - 12.01100, atol=2e-5)


def test_extinction_from_two_airmasses() -> None:
    # EXT-01: Bouguer line by arithmetic; m = 13.45 at X = 1.2, 13.70 at X = 2.0.
    line = fit_extinction(np.array([1.2, 2.0]), np.array([-13.45, -13.70]), np.array([0.01, 0.01]))
    assert line is not None
    assert line.first_order == pytest.approx(0.3125, abs=1e-4)
    assert line.zp0_mag == pytest.approx(-13.0750, abs=1e-4)


def test_landolt_stars_give_back_what_was_put_in() -> None:
    # Landolt 1992 V, B-V through v = V - 22.35 + 0.15 X - T (B-V), T = -0.045: all must return to 1e-3.
    catalogue = np.array([row[1] for row in LANDOLT])
    colour = np.array([row[2] for row in LANDOLT])
    airmass = np.array([1.0, 1.3, 1.7, 2.1])
    v = catalogue - 22.35 + 0.15 * airmass[:, None] + 0.045 * colour
    solution = solve_zero_points(catalogue - v, np.full(v.shape, 0.005), np.full(10, 0.003), colour, np.ones(4, bool))
    line = fit_extinction(airmass, solution.zp_mag, solution.zp_err_mag)
    assert line is not None
    assert solution.term == pytest.approx(-0.045, abs=1e-3)
    assert line.first_order == pytest.approx(0.15, abs=1e-3)
    assert line.zp0_mag == pytest.approx(22.35, abs=1e-3)


@pytest.mark.parametrize(
    ("n_sigma", "expected"),
    [
        (5.0, 19.5598),  # LIM-01: m = ZP - 2.5 log10(n σ), ZP 25, σ 30
        (3.0, 20.1144),  # LIM-01
    ],
)
def test_limit(n_sigma: float, expected: float) -> None:
    assert limiting_magnitude(30.0, n_sigma, 25.0) == pytest.approx(expected, abs=1e-4)


def test_asymmetric_errors() -> None:
    # LIM-02: definition; F = 100, σ = 20.
    assert asymmetric_errors(100.0, 20.0) == pytest.approx((0.2423, 0.1980), abs=1e-4)


def test_inverse_variance_mean() -> None:
    # CMB-01: arithmetic; 105 ± 10, 98 ± 5, 110 ± 20.
    mean = combine(np.array([105.0, 98.0, 110.0]), np.array([10.0, 5.0, 20.0]))
    assert mean.flux == pytest.approx(99.9048, abs=1e-4)
    assert mean.flux_err == pytest.approx(4.3644, abs=1e-4)
    assert mean.chi2 == pytest.approx(0.6595, abs=1e-4)


def test_weighted_mean_modulus() -> None:
    # AVG-01: arithmetic; the weights serve magnitudes as well as fluxes.
    mean = combine(np.array([31.80, 31.72, 31.77]), np.array([0.10, 0.08, 0.052]))
    assert mean.flux == pytest.approx(31.7623, abs=1e-4)
    assert mean.flux_err == pytest.approx(0.0400, abs=1e-4)
    assert mean.chi2 == pytest.approx(0.444, abs=1e-3)


def test_additive_floor() -> None:
    # CHI-01: s solves sum r²/(e² + s²) = dof; found independently.
    residuals, errors = np.array([0.5, -1.2, 2.0, 0.3, -0.8]), np.array([0.4, 0.5, 0.6, 0.3, 0.4])
    assert np.sum((residuals / errors) ** 2) == pytest.approx(23.434, abs=1e-3)
    assert additive_floor(residuals, errors, 4) == pytest.approx(1.1424, abs=1e-3)
