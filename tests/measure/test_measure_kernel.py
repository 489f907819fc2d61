"""Convolution, interpolation and their transposes: checked against direct sums and a library."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import convolve2d

from reduce.measure.forced import spread
from reduce.measure.kernel import CHOICES, Sums, fit, make_basis
from reduce.measure.resample import Affine, sampling


def test_terms_of_the_widths_and_degrees() -> None:
    basis = make_basis(2.0, 4.0, 1)
    assert basis.sigma_px[0] == pytest.approx((4.0**2 - 2.0**2) ** 0.5 / 2.3548, rel=1e-4)
    # A polynomial of degree d in two variables has (d + 1)(d + 2) / 2 terms (Alard & Lupton 1998, section 2).
    assert len(basis.terms) == 15 + 6 + 1 + 1
    assert len(basis.chosen((2, -1, -1, -1))) == 6
    assert all(len(choice) == len(basis.sigma_px) for choice in CHOICES)


@pytest.mark.parametrize("step", [1, 2])
def test_convolution_is_that_of_a_library(step: int) -> None:
    basis = make_basis(2.0, 3.0, step)
    ny, nx = 9, 12
    rng = np.random.default_rng(1)
    image = rng.normal(size=(step * (ny - 1) + 1 + 2 * basis.half, step * (nx - 1) + 1 + 2 * basis.half))
    found = basis.convolve(image[None], (ny, nx))[:, 0]
    for k, term in enumerate(basis.images()):
        np.testing.assert_allclose(found[k], convolve2d(image, term, mode="valid")[::step, ::step], atol=1e-12)


@pytest.mark.parametrize("step", [1, 2])
def test_spread_is_the_transpose_of_the_convolution(step: int) -> None:
    basis = make_basis(2.0, 3.0, step)
    rng = np.random.default_rng(2)
    coefficient = rng.normal(size=len(basis.terms))
    kernel = np.einsum("k,kij->ij", coefficient, basis.images())
    weights = rng.normal(size=(9, 12))
    image = rng.normal(size=(step * 8 + 1 + 2 * basis.half, step * 11 + 1 + 2 * basis.half))
    there = np.einsum("k,kij->ij", coefficient, basis.convolve(image[None], (9, 12))[:, 0])
    assert (weights * there).sum() == pytest.approx((spread(weights, kernel, step) * image).sum(), rel=1e-9)


@given(seed=st.integers(0, 1000))
@settings(max_examples=20, deadline=None)
def test_reading_between_pixels_and_its_transpose(seed: int) -> None:
    rng = np.random.default_rng(seed)
    values, weights = rng.normal(size=(45, 47)), rng.normal(size=40)
    # The transpose is exact but for what the spline's filter carries to the border, which dies out as 0.43 per pixel.
    at = sampling(rng.uniform(18, 28, 40), rng.uniform(18, 26, 40), values.shape)
    assert (weights * at.read(values)).sum() == pytest.approx((at.back(weights) * values).sum(), rel=1e-5, abs=1e-5)
    anywhere = sampling(rng.uniform(-0.4, 46.4, 40), rng.uniform(-0.4, 44.4, 40), values.shape)
    np.testing.assert_allclose(anywhere.read(np.full(values.shape, 7.0)), 7.0, rtol=1e-9)
    outside = sampling(np.array([-3.0, 60.0]), np.array([5.0, 5.0]), values.shape)
    assert not outside.inside.any()
    assert not outside.read(values).any()


def test_pixels_read_at_their_centres_are_themselves() -> None:
    values = np.random.default_rng(9).normal(size=(12, 10))
    y, x = np.mgrid[0:12, 0:10].astype(float)
    np.testing.assert_allclose(sampling(x.ravel(), y.ravel(), values.shape).read(values), values.ravel(), atol=1e-9)


@pytest.mark.parametrize(("fwhm_px", "worst"), [(2.0, 2e-2), (2.5, 6e-3), (3.5, 1e-3)])
def test_interpolation_of_a_star(fwhm_px: float, worst: float) -> None:
    """A sampled Gaussian, read at other places, is that Gaussian there; what its pixels do not hold remains: the light
    beyond their highest frequency is exp(-(pi sigma)² / 2) = 6e-2, 4e-3 and 2e-5 of it."""
    sigma = fwhm_px / 2.3548
    y, x = np.mgrid[0:31, 0:31]
    gauss = np.exp(-0.5 * ((x - 15.3) ** 2 + (y - 14.8) ** 2) / sigma**2)
    rng = np.random.default_rng(3)
    px, py = rng.uniform(5, 25, 500), rng.uniform(5, 25, 500)
    expected = np.exp(-0.5 * ((px - 15.3) ** 2 + (py - 14.8) ** 2) / sigma**2)
    assert np.abs(sampling(px, py, gauss.shape).read(gauss) - expected).max() < worst


def test_affine_map_and_its_area() -> None:
    turn = np.radians(30.0)
    c, s = 0.7 * np.cos(turn), 0.7 * np.sin(turn)
    affine = Affine(((c, -s), (s, c)), (10.0, 20.0), (3.0, 4.0))
    x, y = affine(np.array([10.0, 11.0]), np.array([20.0, 20.0]))
    np.testing.assert_allclose(x, [3.0, 3.0 + c])
    np.testing.assert_allclose(y, [4.0, 4.0 + s])
    assert affine.area == pytest.approx(0.49)


def test_noise_of_the_columns_does_not_bias_the_fit() -> None:
    """Regression on a noisy column is low by its noise over its power, unless that is taken off."""
    rng = np.random.default_rng(5)
    n = 20_000
    true = rng.normal(size=n)
    column, value = true + rng.normal(0, 0.4, n), 3.0 * true + rng.normal(0, 0.1, n)
    normal, right = np.array([[column @ column]]), np.array([column @ value])
    first = [np.array([0])]
    plain = fit(Sums(normal, np.zeros((1, 1)), right, float(value @ value), n), first).coefficient[0]
    allowed = fit(Sums(normal, np.array([[n * 0.16]]), right, float(value @ value), n), first).coefficient[0]
    assert plain == pytest.approx(3.0 / 1.16, rel=0.02)
    assert allowed == pytest.approx(3.0, rel=0.02)


def test_the_criterion_takes_no_more_terms_than_needed() -> None:
    rng = np.random.default_rng(6)
    design = rng.normal(size=(3000, 6))
    sets = [np.arange(k) for k in (1, 2, 3, 6)]
    for needed in (1, 3):
        value = design[:, :needed].sum(axis=1) + rng.normal(size=3000)
        sums = Sums(design.T @ design, np.zeros((6, 6)), design.T @ value, float(value @ value), 3000)
        found = fit(sums, sets)
        assert len(found.columns) == needed
        assert found.chi2 == pytest.approx(1.0, abs=0.1)
