"""Sky levels: unbiased on gradients, by neighbours and under skewed photon noise, with an honest error."""

from __future__ import annotations

import numpy as np
import pytest
from star_images import calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.sky import OUTER_FWHM, annulus_sky

FWHM = 3.0
NOBODY = np.zeros((0, 2))


def sky_of(data, x, y, neighbours=NOBODY, usable=None, fwhm=FWHM):
    data = np.asarray(data, np.float32)
    if usable is None:
        usable = np.isfinite(data)
    return annulus_sky(data, usable, neighbours, np.asarray(x, float), np.asarray(y, float), fwhm)


def test_error_is_the_scatter_of_the_level() -> None:
    rng = np.random.default_rng(1)
    x, y = grid(500, 50, rng)
    levels, errors, sigmas = [], [], []
    for _ in range(15):
        sky = sky_of(rng.normal(200.0, 15.0, (500, 500)), x, y)
        levels.append(sky.level_e_px)
        errors.append(sky.err_e_px)
        sigmas.append(sky.sigma_e_px)
    pulls = (np.array(levels) - 200.0) / np.array(errors)
    assert np.sqrt((pulls**2).mean()) == pytest.approx(1.0, abs=0.05)
    assert np.mean(sigmas) == pytest.approx(15.0, rel=0.01)
    area = np.pi * FWHM**2 * (OUTER_FWHM**2 - 4.0**2)
    assert np.mean(sky.n_px) == pytest.approx(area, rel=0.05)


@pytest.mark.parametrize("sky_e", [3.0, 20.0, 400.0])
def test_photon_noise_does_not_bias_the_level(sky_e: float) -> None:
    """A median would lie 0.17 electrons low."""
    rng = np.random.default_rng(2)
    x, y = grid(500, 50, rng)
    levels = [sky_of(rng.poisson(sky_e, (500, 500)), x, y).level_e_px for _ in range(20)]
    error = np.sqrt(sky_e / 900 / np.size(levels))
    assert np.mean(levels) == pytest.approx(sky_e, abs=0.03 + 3 * error)


def test_a_gradient_does_not_bias_even_a_lopsided_annulus() -> None:
    rows, columns = np.mgrid[0:300, 0:300].astype(float)
    data = 500.0 + 2.0 * columns - 1.5 * rows
    x, y = np.array([150.3, 8.2, 295.0, 60.0]), np.array([150.4, 100.0, 297.3, 200.0])
    neighbours = np.array([[165.0, 150.0], [60.0, 215.0], [52.0, 212.0]])
    sky = sky_of(data, x, y, neighbours)
    assert sky.level_e_px == pytest.approx(500.0 + 2.0 * x - 1.5 * y, abs=1e-3)


def test_neighbours_and_unseen_stars_do_not_raise_the_level() -> None:
    rng = np.random.default_rng(3)
    x, y = grid(500, 50, rng)
    near = np.column_stack([x + 5.5 * FWHM * np.cos(y), y + 5.5 * FWHM * np.sin(y)])
    truth = draw(moffat(FWHM), *near.T, np.full(len(x), 5e4), 500)
    data = expose(truth.light_e, 300.0, 8.0, rng)
    known = sky_of(data, x, y, near)
    unknown = sky_of(data, x, y)
    sigma = np.sqrt(300.0 + 64.0)
    assert np.mean(known.level_e_px - 300.0) == pytest.approx(0.0, abs=0.15)
    # A bright star that detection missed: clipping leaves a twentieth of the noise of a pixel.
    assert np.mean(unknown.level_e_px - 300.0) == pytest.approx(0.0, abs=0.15 * sigma)


def test_no_star_near_a_large_galaxy_is_measured_with_its_slope() -> None:
    """On an exponential disc the level at the star is taken, within a tenth of the disc's light there."""
    rows, columns = np.mgrid[0:300, 0:300].astype(float)
    disc = 3000.0 * np.exp(-np.hypot(rows - 150, columns - 150) / 25.0)
    x, y = np.array([210.0]), np.array([170.0])
    here = 3000.0 * np.exp(-np.hypot(y - 150, x - 150) / 25.0)
    sky = sky_of(200.0 + disc, x, y)
    assert sky.level_e_px - 200.0 == pytest.approx(here, rel=0.2)


@pytest.mark.parametrize("place", [(16.0, -9.0), (10.0, 10.0), (20.0, 5.0), (-7.0, 14.0)])
def test_on_a_host_the_light_at_the_star_is_found_where_a_plane_misses_it(place: tuple[float, float]) -> None:
    """An inclined exponential disc under photon noise: a bent surface is nearer than 30 %, a plane misses 60 %."""

    def disc(x: np.ndarray | float, y: np.ndarray | float) -> np.ndarray:
        return 3000.0 * np.exp(-np.hypot((x - 150.0) / 11.0, (y - 150.0) / 8.0))

    rows, columns = np.mgrid[0:300, 0:300].astype(float)
    data = np.random.default_rng(8).poisson(300.0 + disc(columns, rows)).astype(np.float32)
    x, y = np.array([150.0 + place[0]]), np.array([150.0 + place[1]])
    centre = np.array([[150.0, 150.0]])
    found = annulus_sky(data, np.ones(data.shape, bool), centre, x, y, FWHM, host="inside")
    assert found.level_e_px - 300.0 == pytest.approx(disc(x, y), rel=0.3)


def test_what_a_sky_on_a_host_still_misses_is_in_its_error() -> None:
    rows, columns = np.mgrid[0:300, 0:300].astype(float)
    disc = 3000.0 * np.exp(-np.hypot((columns - 150.0) / 11.0, (rows - 150.0) / 8.0))
    data = np.random.default_rng(10).poisson(300.0 + disc).astype(np.float32)
    x, y = np.array([170.0, 40.0, 60.0, 250.0]), np.array([155.0, 40.0, 250.0, 60.0])
    table = measure_stars(
        calibrated(data), x, y, FWHM, 1.0, NOBODY, host_arcsec=np.array([10.0, np.nan, np.nan, np.nan])
    )
    here = 3000.0 * np.exp(-np.hypot(20.0 / 11.0, 5.0 / 8.0))
    assert abs(table["sky_e_px"][0] - 300.0 - here) < 3.0 * table["sky_err_e_px"][0]
    assert 0.1 * here < table["sky_err_e_px"][0] < 0.25 * here
    assert (table["sky_err_e_px"][1:] < 1.5).all()


def test_in_the_outskirts_a_wider_annulus_is_as_true_and_less_noisy() -> None:
    rows, columns = np.mgrid[0:300, 0:300].astype(float)
    disc = 3000.0 * np.exp(-np.hypot((columns - 150.0) / 11.0, (rows - 150.0) / 8.0))
    x, y, found = np.array([198.0]), np.array([172.0]), {}
    here = 3000.0 * np.exp(-np.hypot(48.0 / 11.0, 22.0 / 8.0))
    for host in ("inside", "outskirts"):
        levels = []
        for seed in range(20):
            data = np.random.default_rng(seed).poisson(300.0 + disc).astype(np.float32)
            sky = annulus_sky(data, np.ones(data.shape, bool), NOBODY, x, y, FWHM, host=host)
            levels.append(sky.level_e_px[0] - 300.0)
        found[host] = np.mean(levels) - here, np.std(levels)
    assert abs(found["outskirts"][0]) < 0.1 * here + 3 * found["outskirts"][1] / 20**0.5
    assert found["outskirts"][1] < 0.8 * found["inside"][1]


def test_error_on_a_host_is_the_scatter_of_the_level() -> None:
    rng = np.random.default_rng(9)
    x, y = grid(500, 50, rng)
    pulls = []
    for _ in range(10):
        data = rng.normal(200.0, 15.0, (500, 500)).astype(np.float32)
        sky = annulus_sky(data, np.ones(data.shape, bool), NOBODY, x, y, FWHM, host="inside")
        pulls.append((sky.level_e_px - 200.0) / sky.err_e_px)
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=0.06)


def test_masked_pixels_do_not_count() -> None:
    data = np.random.default_rng(4).normal(100.0, 5.0, (100, 100))
    usable = np.ones(data.shape, bool)
    data[:, 52:] = 1e6
    usable[:, 52:] = False
    sky = sky_of(data, [50.0], [50.0], usable=usable)
    assert sky.level_e_px == pytest.approx(100.0, abs=1.0)


def test_crowding_takes_neighbours_pixels_back_rather_than_none() -> None:
    rng = np.random.default_rng(5)
    neighbours = np.column_stack([axis.ravel() for axis in np.meshgrid(np.arange(0, 100, 4.0), np.arange(0, 100, 4.0))])
    sky = sky_of(rng.normal(100.0, 5.0, (100, 100)), [50.0], [50.0], neighbours)
    assert sky.n_px > 300
    assert sky.level_e_px == pytest.approx(100.0, abs=1.0)


def test_narrow_images_still_get_three_hundred_pixels() -> None:
    sky = sky_of(np.random.default_rng(6).normal(100.0, 5.0, (100, 100)), [50.0], [50.0], fwhm=1.2)
    assert sky.n_px >= 295


@pytest.mark.parametrize("data", [np.full((60, 60), np.nan), np.full((60, 60), 7.0)])
def test_odd_frames(data: np.ndarray) -> None:
    sky = sky_of(data, [30.0], [30.0])
    if np.isnan(data).all():
        assert np.isnan(sky.level_e_px).all()
        assert sky.n_px == 0
    else:
        assert sky.level_e_px == pytest.approx(7.0)
        assert sky.sigma_e_px == pytest.approx(0.0)


def test_a_frame_without_noise_can_be_measured() -> None:
    table = measure_stars(calibrated(np.full((60, 60), 7.0)), np.array([30.0]), np.array([30.0]), 3.0, 1.0, NOBODY)
    assert table["flux_e"][0] == pytest.approx(0.0, abs=1e-3)
