"""Satellites and aeroplanes on drawn frames: found where they are, and nothing else taken for one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from star_images import calibrated, draw, expose, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.backdrop import backdrop
from reduce.measure.trails import Trail, find_trails, mark_trails
from reduce.records import LADDER_FWHM, CalibratedImage, PixelFlag, StarFlag
from reduce.stars.detect import detect
from reduce.stars.width import frame_fwhm

SIDE, FWHM_PX, SKY_E = 512, 3.0, 200.0
SKY_SIGMA_E = (SKY_E + 64.0) ** 0.5


def light(seed: int, stars: int = 80) -> np.ndarray:
    rng = np.random.default_rng(seed)
    x, y = rng.uniform(10, SIDE - 10, (2, stars))
    return draw(moffat(FWHM_PX), x, y, 10 ** rng.uniform(2.8, 5.8, stars), SIDE).light_e


def line(angle_deg: float, distance_px: float, peak_e: float, fwhm_px: float = FWHM_PX) -> np.ndarray:
    y, x = np.indices((SIDE, SIDE))
    angle = np.radians(angle_deg)
    off = x * np.cos(angle) + y * np.sin(angle) - distance_px
    return peak_e * np.exp(-4 * np.log(2) * (off / fwhm_px) ** 2)


def through(angle_deg: float, x_px: float, y_px: float) -> float:
    angle = np.radians(angle_deg)
    return float(x_px * np.cos(angle) + y_px * np.sin(angle))


def look(
    light_e: np.ndarray, seed: int = 0, sky_e: np.ndarray | float = SKY_E
) -> tuple[tuple[Trail, ...], float | None]:
    return look_at(calibrated(expose(light_e, sky_e, 8.0, np.random.default_rng(seed))))


def look_at(image: CalibratedImage) -> tuple[tuple[Trail, ...], float | None]:
    stars = detect(image.data_e, image.mask, saturation_e=image.saturation_e)
    fwhm = frame_fwhm(stars)
    behind = backdrop(image.data_e, image.mask, stars, fwhm)
    return find_trails(behind, image.data_e, image.mask, stars, fwhm), behind.gradient


@pytest.mark.parametrize("peak_sigma", [1.5, 5.0, 50.0, 1000.0])
@pytest.mark.parametrize("angle_deg", [12.0, 48.7, 133.0, 171.0])
def test_a_trail_is_found_to_a_fraction_of_a_pixel(angle_deg: float, peak_sigma: float) -> None:
    trails, _ = look(light(1) + line(angle_deg, through(angle_deg, 270.0, 230.0), peak_sigma * SKY_SIGMA_E))
    assert len(trails) == 1
    off = trails[0].off_px(np.array([270.0]), np.array([230.0]))[0]
    assert off < 1.0
    assert abs(trails[0].angle_deg - angle_deg) < 0.5
    assert 0.4 * FWHM_PX < trails[0].half_width_px < 3.5 * FWHM_PX


def test_two_trails() -> None:
    trails, _ = look(light(2) + line(30.0, through(30, 250, 250), 200.0) + line(110.0, through(110, 200, 300), 300.0))
    assert sorted(round(trail.angle_deg / 10) for trail in trails) == [3, 11]


def test_a_trail_that_ends_on_the_frame_is_found() -> None:
    y, _ = np.indices((SIDE, SIDE))
    trails, _ = look(light(3) + np.where(y < 350, line(35.0, through(35, 250, 250), 100.0), 0.0))
    assert len(trails) == 1


def test_nothing_is_taken_for_a_trail() -> None:
    y, x = np.indices((SIDE, SIDE))
    edge_on = 3000 * np.exp(-np.hypot((x - 256) + 0.3 * (y - 256), 5 * ((y - 256) - 0.3 * (x - 256))) / 15)
    ray = np.where((np.abs(x - y - 40) < 1) & (x > 200) & (x < 250), 500.0, 0.0)
    spike = np.where((x == 300) & (y > 100) & (y < 400), 3000.0, 0.0)
    found = []
    for seed in range(4):
        for extra in (0.0, edge_on, ray, spike):
            found += look(light(seed) + extra, seed)[0]
    assert found == []


def test_bad_columns_and_trailed_stars_are_no_trails() -> None:
    image = calibrated(expose(light(5), SKY_E, 8.0, np.random.default_rng(5)))
    column = image.data_e.copy()
    column[:, 101] += 300
    assert look_at(replace(image, data_e=column))[0] == ()
    mask = image.mask.copy()
    column[:, 140:143] = 6e4
    mask[:, 140:143] = PixelFlag.SATURATED
    assert look_at(replace(image, data_e=column, mask=mask))[0] == ()
    rng = np.random.default_rng(6)
    x, y = rng.uniform(20, SIDE - 20, (2, 60))
    sheared = moffat(FWHM_PX).shear(g1=0.5, g2=0.2)
    assert look(draw(sheared, x, y, 10 ** rng.uniform(3, 5.5, 60), SIDE).light_e)[0] == ()


@pytest.mark.parametrize("gradient", [0.0, 0.1, 0.4])
def test_the_gradient_of_the_sky(gradient: float) -> None:
    y, x = np.indices((SIDE, SIDE)) / SIDE - 0.5
    sky = SKY_E * (1 + gradient * (0.6 * x + 0.8 * y))
    found = look(light(7), 7, sky)[1]
    assert found == pytest.approx(gradient, abs=0.02)


def test_stars_near_a_trail_are_flagged_by_aperture() -> None:
    x = np.array([100.0, 200.0, 300.0])
    y = np.array([100.0, 204.0, 330.0])
    image = calibrated(expose(draw(moffat(FWHM_PX), x, y, np.full(3, 3e4), SIDE).light_e, SKY_E, 8.0,
                              np.random.default_rng(1)))  # fmt: skip
    table = measure_stars(image, x, y, FWHM_PX, 1.0, np.column_stack([x, y]))
    mark_trails(table, (Trail(135.0, 0.0, 2.0),), FWHM_PX, 1.0)  # along x = y: 0, 2.8 and 21.2 px away
    hit = (table["flags"] & int(StarFlag.TRAIL)) != 0
    assert hit[0].all()
    assert not hit[2].any()
    reached = np.array(LADDER_FWHM) * FWHM_PX + 2.0 > 4.0 / 2**0.5
    assert hit[1, : len(LADDER_FWHM)].tolist() == reached.tolist()
    assert ((table["psf_flags"] & int(StarFlag.TRAIL)) != 0).tolist() == [True, True, False]


def test_empty_and_tiny_frames() -> None:
    assert look(np.zeros((SIDE, SIDE)))[0] == ()
    small = calibrated(expose(np.zeros((24, 24)), SKY_E, 8.0, np.random.default_rng(1)))
    assert look_at(small)[0] == ()
    blind = replace(small, mask=np.full((24, 24), PixelFlag.BAD, np.uint8))
    assert look_at(blind) == ((), None)
