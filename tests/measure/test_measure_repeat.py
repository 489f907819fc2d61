"""Stars drawn by GalSim through detection, aperture and joint solution: nothing on the way adds noise of its own."""

from __future__ import annotations

import numpy as np
import pytest
from star_images import calibrated, draw, expose, moffat

from reduce.curve.comparison import star_points
from reduce.field.wcs import pixel_to_sky, sky_to_pixel
from reduce.measure.aperture import measure_stars
from reduce.records import Choices, FieldSolution, FrameInfo, Measured, Quality, Sequence
from reduce.settings import Settings
from reduce.standard.solve import solve_standard
from reduce.stars.centroid import centroid
from reduce.stars.detect import detect
from reduce.stars.width import frame_fwhm

SIDE, FRAMES, EXPOSURE_S = 512, 12, 60.0
ZERO_POINT = 24.5
"""Of 1 e-/s: 11 mag gives 1.5 million electrons in 60 s."""


def test_bright_stars_repeat_to_four_millimagnitudes_and_faint_ones_to_their_photons() -> None:
    rng = np.random.default_rng(4)
    grid = np.arange(55, SIDE - 50, 70.0)
    x, y = (axis.ravel() + rng.uniform(-6, 6, axis.size) for axis in np.meshgrid(grid, grid))
    n = len(x)
    mag = np.concatenate([rng.uniform(12.0, 13.5, n // 2), rng.uniform(16.0, 17.6, n - n // 2)])
    rng.shuffle(mag)
    scale = 1.0 / 3600.0
    home = FieldSolution((150.0, 20.0), (255.5, 255.5), ((-scale, 0.0), (0.0, scale)), n, 0.05)
    ra, dec = pixel_to_sky(home, x, y)
    sequence = Sequence("drawn", tuple(f"s{k}" for k in range(n)), ra, dec, {"V": mag}, {"V": np.full(n, 0.005)})
    rows, photon = [], np.full((FRAMES, n), np.nan)
    for k in range(FRAMES):
        shift = rng.uniform(-5, 5, 2)
        here = FieldSolution(home.crval_deg, (255.5 + shift[0], 255.5 + shift[1]), home.cd_deg, n, 0.05)
        px, py = sky_to_pixel(here, ra, dec)
        fwhm = rng.uniform(2.2, 3.6)
        flux = EXPOSURE_S * 10 ** (-0.4 * (mag - ZERO_POINT + 0.05 * rng.normal()))
        image = calibrated(expose(draw(moffat(fwhm), px, py, flux, SIDE).light_e, 250.0, 8.0, rng))
        found = detect(image.data_e, image.mask, saturation_e=1e9)
        fwhm_px = frame_fwhm(found)
        cx, cy, _, good = centroid(image.data_e, found.x_px, found.y_px, fwhm_px)
        table = measure_stars(image, cx, cy, fwhm_px, 1.0, np.column_stack([found.x_px, found.y_px]), centred=good)
        table["ra_deg"], table["dec_deg"] = pixel_to_sky(here, cx, cy)
        quality = Quality(fwhm_px, 1.0, 0.0, 250.0, 18.0, len(found), 0, EXPOSURE_S, None, 0.0, None, True)
        info = FrameInfo("light", "V", "V", "", "cam", 60000.9 + 0.002 * k, EXPOSURE_S, None, None, 1.0, 1.5, 8.0, None,
                         SIDE, SIDE)  # fmt: skip
        rows.append(Measured(f"f{k:02}", "r", "measured", "", info, None, quality, here, table))
    solution = solve_standard(rows, sequence, Choices(aperture_fwhm={"V": 1.5}), Settings())
    assert {verdict.state for verdict in solution.verdicts.values()} == {"kept"}
    assert all("over the frame" not in note for note in solution.notes)
    found_mag, err = np.full((FRAMES, n), np.nan), photon
    for point in star_points(solution, sequence):
        at = int(point.file[1:]), int(point.star[1:])  # type: ignore[index]
        found_mag[at], err[at] = point.mag, point.err
    assert np.isfinite(found_mag).sum() > 0.95 * found_mag.size
    away = found_mag - np.nanmean(found_mag, axis=0)
    bright, faint = mag < 14.0, mag > 15.5
    lost = np.sqrt(FRAMES / (FRAMES - 1))
    assert np.sqrt(np.nanmean(away[:, bright] ** 2)) * lost < 0.004
    # 12 frames of about 24 stars: 1 within 0.045 by chance.
    assert np.sqrt(np.nanmean((away / err)[:, faint] ** 2)) * lost == pytest.approx(1.0, abs=0.1)
