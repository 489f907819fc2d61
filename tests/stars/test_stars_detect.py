"""Detection, widths and centroids on stars that GalSim draws, with Poisson and read noise added here."""

from __future__ import annotations

import math

import galsim
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq

from reduce.records import PixelFlag
from reduce.stars.centroid import centroid, centroid_error
from reduce.stars.detect import WINGS_TO_WIDTH, detect
from reduce.stars.width import FWHM_PER_SIGMA, frame_fwhm

READ_NOISE_E = 8.0


def expose(image: np.ndarray, rng: np.random.Generator, sky_e: float = 300.0) -> np.ndarray:
    noise = rng.normal(0, READ_NOISE_E, image.shape)
    return (rng.poisson(np.maximum(image, 0) + sky_e) + noise).astype(np.float32)


def draw(profile: galsim.GSObject, places: np.ndarray, flux_e: np.ndarray, n: int = 512, reach: int = 50) -> np.ndarray:
    """(n, n) electrons without sky; ``places`` (k, 2) are 0-based pixel coordinates, light ends at ``reach`` pixels."""
    image = galsim.ImageD(n, n, scale=1.0)
    for (x, y), flux in zip(places, flux_e, strict=True):
        column, row = round(x) + 1, round(y) + 1  # GalSim counts pixels from 1
        about = galsim.BoundsI(column - reach, column + reach, row - reach, row + reach) & image.bounds
        centre = galsim.PositionD(x + 1, y + 1)
        profile.withFlux(float(flux)).drawImage(image=image[about], center=centre, add_to_image=True)
    return image.array


def grid(rng: np.random.Generator, step: int = 45, n: int = 512) -> np.ndarray:
    """Places on a grid, each at a pixel phase of its own."""
    line = np.arange(step, n - step / 2, step)
    return np.array([(x, y) for x in line for y in line]) + rng.uniform(-0.5, 0.5, (len(line) ** 2, 2))


def found(data: np.ndarray, mask: np.ndarray | None = None, saturation_e: float = 1e9, most: int = 500):
    good = np.zeros(data.shape, np.uint8)
    return detect(data, good if mask is None else mask, saturation_e=saturation_e, max_stars=most)


def nearest(places: np.ndarray, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Index into the found stars and distance, for every true place."""
    apart = np.hypot(places[:, :1] - x, places[:, 1:] - y)
    return apart.argmin(axis=1), apart.min(axis=1)


PROFILES = {"Gaussian": galsim.Gaussian, "Moffat 2.5": lambda fwhm: galsim.Moffat(beta=2.5, fwhm=fwhm),
            "Moffat 4.765": lambda fwhm: galsim.Moffat(beta=4.765, fwhm=fwhm)}  # fmt: skip


@pytest.mark.parametrize("fwhm", [1.5, 2.0, 3.0, 5.0, 8.0])
@pytest.mark.parametrize("profile", PROFILES)
def test_every_star_is_found_with_its_width_and_place(fwhm, profile):
    rng = np.random.default_rng(11)
    places = grid(rng, step=max(50, int(9 * fwhm)))
    flux = 10 ** rng.uniform(4.3, 5.3, len(places))
    data = expose(draw(PROFILES[profile](fwhm=fwhm), places, flux), rng)
    stars = found(data)
    _, apart = nearest(places, stars.x_px, stars.y_px)
    assert (apart < 1).all()
    assert len(stars) <= len(places) + 2
    width = frame_fwhm(stars)
    assert width == pytest.approx(fwhm, rel=0.05)
    x, y, error, good = centroid(data, stars.x_px, stars.y_px, width)
    assert good.all()
    index, apart = nearest(places, x, y)
    pull = np.concatenate([(x[index] - places[:, 0]) / error[index], (y[index] - places[:, 1]) / error[index]])
    if fwhm >= 2:  # narrower images carry a phase error of a few thousandths of a pixel, more than their photon noise
        assert 0.8 < np.std(pull) < 1.3
    assert abs(np.mean(pull)) < 0.35
    assert (apart < 0.02 + 5 * error[index]).all()
    # CEN-01: the limit of a Gaussian image without background; the window costs a fifth. Over larger images the sky
    # is no longer small beside 1e5 electrons.
    if profile == "Gaussian" and 2 <= fwhm <= 3:
        bright = flux > 1e5
        limit = centroid_error(math.sqrt(fwhm**2 + FWHM_PER_SIGMA**2 / 12), 1.0) / np.sqrt(flux[bright])
        ratio = error[index][bright] / limit
        assert (ratio > 1.1).all()
        assert (ratio < 1.3).all()


def test_brightest_first_and_no_more_than_asked():
    rng = np.random.default_rng(12)
    places = grid(rng)
    flux = 10 ** rng.uniform(4, 5.5, len(places))
    stars = found(expose(draw(galsim.Gaussian(fwhm=3), places, flux), rng), most=20)
    assert len(stars) == 20
    assert (np.diff(stars.flux_e) <= 0).all()
    index, _ = nearest(np.column_stack([stars.x_px, stars.y_px]), places[:, 0], places[:, 1])
    assert set(index) == set(np.argsort(-flux)[:20])


@pytest.mark.parametrize("angle_deg", [10.0, 75.0, 130.0])
def test_trailed_stars_are_long_and_point_along_the_trail(angle_deg):
    rng = np.random.default_rng(13)
    places = grid(rng, 70)
    trail = galsim.Box(8.0, 0.1).rotate(angle_deg * galsim.degrees)
    smeared = galsim.Convolve(galsim.Gaussian(fwhm=3), trail)
    stars = found(expose(draw(smeared, places, np.full(len(places), 4e4)), rng))
    _, apart = nearest(places, stars.x_px, stars.y_px)
    assert (apart < 1).mean() > 0.95
    assert np.median(stars.elongation) > 1.5
    turn = np.exp(2j * np.radians(stars.position_angle_deg)).mean()
    assert abs(turn) > 0.95
    assert abs((np.degrees(np.angle(turn)) / 2 - angle_deg + 90) % 180 - 90) < 3


def test_round_stars_are_round():
    rng = np.random.default_rng(14)
    places = grid(rng)
    stars = found(expose(draw(galsim.Moffat(beta=3, fwhm=3.5), places, np.full(len(places), 1e5)), rng))
    assert np.median(stars.elongation) < 1.03
    assert abs(np.exp(2j * np.radians(stars.position_angle_deg)).mean()) < 0.4


def test_out_of_focus_stars_are_found():
    rng = np.random.default_rng(15)
    places = grid(rng, 60)
    ring = galsim.Convolve(galsim.TopHat(7.0) - 0.16 * galsim.TopHat(2.8), galsim.Gaussian(fwhm=2.5))
    stars = found(expose(draw(ring, places, np.full(len(places), 8e4)), rng))
    _, apart = nearest(places, stars.x_px, stars.y_px)
    assert (apart < 2).mean() > 0.9
    assert 8 < frame_fwhm(stars) < 18


def test_a_large_galaxy_does_not_drown_its_field():
    rng = np.random.default_rng(16)
    places = grid(rng)
    places = places[np.hypot(places[:, 0] - 250, places[:, 1] - 260) > 60]
    image = draw(galsim.Gaussian(fwhm=3), places, np.full(len(places), 2e4))
    galaxy = galsim.Convolve(galsim.Exponential(half_light_radius=45), galsim.Gaussian(fwhm=3))
    image += draw(galaxy, np.array([[250.0, 260.0]]), np.array([3e6]), reach=512)
    stars = found(expose(image, rng))
    _, apart = nearest(places, stars.x_px, stars.y_px)
    assert (apart < 1).all()
    assert frame_fwhm(stars) == pytest.approx(3, rel=0.05)
    assert len(stars) <= len(places) + 3  # the galaxy's core is one


def test_hot_pixels_and_cosmic_rays_are_no_stars():
    rng = np.random.default_rng(17)
    places = grid(rng, 60)
    image = expose(draw(galsim.Moffat(beta=3, fwhm=3), places, np.full(len(places), 3e4)), rng)
    hits = rng.integers(20, 490, (80, 2))
    hits = hits[np.hypot(hits[:, :1] - places[:, 0], hits[:, 1:] - places[:, 1]).min(axis=1) > 12]
    image[hits[:, 1], hits[:, 0]] += rng.uniform(500, 20000, len(hits)).astype(np.float32)
    tracks = hits[::4]
    image[tracks[:, 1], tracks[:, 0] + 1] += 3000.0
    stars = found(image)
    _, apart = nearest(places, stars.x_px, stars.y_px)
    assert (apart < 1).all()
    _, false = nearest(hits.astype(float), stars.x_px, stars.y_px)
    assert (false < 2).sum() == 0
    assert frame_fwhm(stars) == pytest.approx(3, rel=0.05)


def test_bad_pixels_take_no_part_and_saturated_stars_are_named():
    rng = np.random.default_rng(18)
    places = grid(rng, 60)
    flux = np.full(len(places), 2e4)
    flux[0] = 4e6
    data = np.minimum(expose(draw(galsim.Gaussian(fwhm=3), places, flux), rng), 60000.0)
    mask = np.zeros(data.shape, np.uint8)
    mask[:, 300] = PixelFlag.BAD
    data[:, 300] = 1e6
    data[200:203, 100:103] = np.nan
    mask[200:203, 100:103] = PixelFlag.NOT_FINITE
    stars = found(data, mask, saturation_e=60000.0)
    assert np.isfinite(stars.flux_e).all()
    assert stars.saturated.sum() == 1
    assert np.hypot(stars.x_px[0] - places[0, 0], stars.y_px[0] - places[0, 1]) < 1.5
    assert stars.saturated[0]
    flagged = expose(draw(galsim.Gaussian(fwhm=3), places, flux), rng)
    mask = np.where(flagged > 60000, PixelFlag.SATURATED, 0).astype(np.uint8)
    assert found(flagged, mask).saturated.sum() == 1


def test_noise_alone_gives_hardly_anything():
    counts = [len(found(expose(np.zeros((512, 512)), np.random.default_rng(seed)))) for seed in range(10)]
    # A 5 sigma cut passes 3e-7 of Gaussian noise: far less than one of 2.6e5 pixels' worth of independent tries.
    assert sum(counts) <= 3


EMPTY = {
    "constant": np.full((256, 256), 1000.0), "zero": np.zeros((256, 256)), "not a number": np.full((256, 256), np.nan),
    "infinite": np.full((256, 256), np.inf), "tiny": np.ones((8, 8)), "one row": np.ones((1, 500)),
}  # fmt: skip


@pytest.mark.parametrize("kind", EMPTY)
def test_images_without_stars_give_none(kind):
    stars = found(EMPTY[kind].astype(np.float32))
    assert len(stars) == 0
    assert math.isnan(frame_fwhm(stars))


def test_the_same_image_gives_the_same_bits():
    rng = np.random.default_rng(19)
    data = expose(draw(galsim.Gaussian(fwhm=3), grid(rng), np.full(100, 1e4)), rng)
    one, two = found(data), found(data.copy())
    assert all(np.array_equal(getattr(one, name), getattr(two, name)) for name in one.__slots__)


def test_centroid_stays_where_there_is_no_star():
    data = expose(np.zeros((100, 100)), np.random.default_rng(20))
    empty, spot = np.zeros(0), np.array([50.2, -30.0, np.nan])
    assert [len(part) for part in centroid(data, empty, empty, 3.0)] == [0, 0, 0, 0]
    x, y, error, good = centroid(data, spot[:2], spot[:2], 3.0)
    assert not good[1]
    assert math.isnan(error[1])
    assert (x[1], y[1]) == (-30.0, -30.0)
    assert not centroid(data, spot[:1], spot[:1], float("nan"))[3].any()


def test_centroid_converges_from_a_pixel_away():
    rng = np.random.default_rng(21)
    places = grid(rng)
    data = expose(draw(galsim.Gaussian(fwhm=3), places, np.full(len(places), 1e5)), rng)
    angle = rng.uniform(0, 2 * np.pi, len(places))
    exact = centroid(data, *places.T, 3.0)
    moved = centroid(data, places[:, 0] + 1.2 * np.cos(angle), places[:, 1] + 1.2 * np.sin(angle), 3.0)
    assert moved[3].all()
    assert np.hypot(moved[0] - exact[0], moved[1] - exact[1]).max() < 0.002


@pytest.mark.parametrize("beta", [2.0, 2.5, 3.0, 4.765, 10.0])
def test_wings_to_width_follows_from_the_profile(beta):
    # Moffat profile of FWHM 1; a Gaussian weight that takes the variance it measures (Bernstein & Jarvis 2002, §3).
    alpha = 1 / (2 * math.sqrt(2 ** (1 / beta) - 1))

    def integral(power: int, variance: float) -> float:
        reach = 12 * math.sqrt(variance)
        return quad(lambda r: r**power * (1 + (r / alpha) ** 2) ** -beta * math.exp(-r * r / 2 / variance), 0, reach)[0]

    adapted = brentq(lambda v: integral(3, v) / integral(1, v) - v, 0.02, 2)
    wings = integral(1, 4 * adapted) / integral(1, adapted) / 1.6 - 1
    moments = FWHM_PER_SIGMA * math.sqrt(adapted)
    assert moments * (1 - WINGS_TO_WIDTH * wings) == pytest.approx(1.0, abs=0.012)
