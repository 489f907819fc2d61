from __future__ import annotations

import galsim
import numpy as np
import pytest
from drawn_fields import SKY_E, apart, drawn

from reduce.stars.centroid import centroid, centroid_error


@pytest.mark.parametrize(
    ("profile", "fwhm", "most"),
    [
        (galsim.Gaussian(fwhm=2.5), 2.5, 1.1),
        (galsim.Gaussian(fwhm=4.0), 4.0, 1.1),
        # The errors are those of a Gaussian image: wings add a quarter at most.
        (galsim.Moffat(beta=3.5, fwhm=4.0), 4.0, 1.25),
        (galsim.Kolmogorov(fwhm=6.0), 6.0, 1.25),
    ],
)
@pytest.mark.parametrize("flux", [4e3, 1e5])
def test_centroids_are_unbiased_and_as_good_as_their_errors(profile, fwhm, most, flux):
    rng = np.random.default_rng(1)
    flux = flux * max(1.0, (fwhm / 4.0) ** 2)
    x, y = apart(440, 34, rng)
    image = drawn(profile, x, y, np.full(len(x), flux), 440, rng)
    start = x + rng.uniform(-0.8, 0.8, len(x)), y + rng.uniform(-0.8, 0.8, len(y))
    found_x, found_y, error, good = centroid(image, *start, fwhm)
    assert good.all()
    miss = np.concatenate([found_x - x, found_y - y])
    pull = miss / np.tile(error, 2)
    assert 0.9 < pull.std() < most
    assert abs(pull.mean()) < 4 / np.sqrt(len(pull))


def test_a_bright_star_reaches_the_photon_limit():
    # σ / √N of a Gaussian image: the limit of Cramér and Rao. A Gaussian window of k times the image's variance costs
    # (1 + 1/k)² / (1 + 2/k) of it: 1.54 for a window of the image's own width, from the integrals of Gaussians.
    rng = np.random.default_rng(2)
    fwhm, flux = 4.0, 4e6
    x, y = apart(400, 32, rng)
    image = drawn(galsim.Gaussian(fwhm=fwhm), x, y, np.full(len(x), flux), 400, rng)
    found_x, found_y, error, _ = centroid(image, x, y, fwhm)
    spread = np.concatenate([found_x - x, found_y - y]).std()
    limit = centroid_error(fwhm, np.sqrt(flux))
    assert limit < spread < 1.7 * limit
    assert np.median(error) == pytest.approx(spread, rel=0.35)


def test_where_there_is_no_star_the_first_position_stays():
    image = np.full((128, 128), SKY_E, np.float32)
    x, y = np.array([30.0, 20.0]), np.array([30.0, 60.0])
    found_x, found_y, error, good = centroid(image, x, y, 3.0)
    assert not good.any()
    assert np.isnan(error).all()
    assert found_x.tolist() == x.tolist()
    assert found_y.tolist() == y.tolist()


def test_a_star_at_the_edge_and_pixels_without_a_number_do_no_harm():
    rng = np.random.default_rng(4)
    image = drawn(galsim.Gaussian(fwhm=3.0), np.array([2.0, 60.0]), np.array([60.0, 60.3]), np.full(2, 1e5), 128, rng)
    image[50, 50] = np.nan
    found_x, found_y, _, good = centroid(image, np.array([2.0, 60.0]), np.array([60.0, 60.0]), 3.0)
    assert good[1]
    assert (found_x[1], found_y[1]) == pytest.approx((60.0, 60.3), abs=0.05)
    assert np.isfinite(found_x).all()
    assert np.isfinite(found_y).all()


def test_nothing_in_nothing_out():
    none = np.zeros(0)
    assert [len(part) for part in centroid(np.ones((64, 64), np.float32), none, none, 3.0)] == [0, 0, 0, 0]
    assert not centroid(np.ones((64, 64), np.float32), np.array([9.0]), np.array([9.0]), float("nan"))[3].any()
