"""In a vignetted corner the flat raises light and noise: the stated error must be that of the fewer photons."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from star_images import calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.stamps import pack, unpack
from reduce.records import FieldSolution

SENSITIVITY, SKY_E, READ_NOISE_E = 0.5, 400.0, 5.0


@pytest.mark.parametrize("flux_e", [3e3, 2e5])
def test_errors_are_those_of_the_photons_that_came(flux_e):
    rng = np.random.default_rng(8)
    x, y = grid(700, 70, rng)
    truth = draw(moffat(3.0), x, y, np.full(len(x), flux_e), 700)
    found, stated = [], []
    for _ in range(4):
        collected = expose(truth.light_e * SENSITIVITY, SKY_E * SENSITIVITY, READ_NOISE_E, rng)
        image = replace(
            calibrated(collected / SENSITIVITY, READ_NOISE_E / SENSITIVITY),
            sensitivity=np.full((700, 700), SENSITIVITY, np.float32),
        )
        table = measure_stars(image, x, y, 3.0, 1.0, truth.xy)
        found.append(table["flux_e"][:, 4])
        stated.append(table["flux_err_e"][:, 4])
        without = measure_stars(replace(image, sensitivity=None), x, y, 3.0, 1.0, truth.xy)
        assert np.median(without["flux_err_e"][:, 4] / table["flux_err_e"][:, 4]) < 0.85
    away = np.array(found) - np.mean(found)  # all stars are alike
    about = np.sqrt(np.mean(away**2)) / np.sqrt(np.mean(np.array(stated) ** 2))
    assert about == pytest.approx(1.0, abs=0.1)  # 400 values: 0.035 alone by chance


def test_the_noise_of_the_sky_in_a_stamp_is_that_of_the_photons_that_came():
    rng = np.random.default_rng(8)
    x, y = grid(300, 100, rng)
    truth = draw(moffat(3.0), x, y, np.full(len(x), 2e4), 300)
    collected = expose(truth.light_e * SENSITIVITY, SKY_E * SENSITIVITY, READ_NOISE_E, rng)
    image = replace(
        calibrated(collected / SENSITIVITY, READ_NOISE_E / SENSITIVITY),
        sensitivity=np.full((300, 300), SENSITIVITY, np.float32),
    )
    table = measure_stars(image, x, y, 3.0, 1.0, truth.xy)
    solution = FieldSolution((10.0, 20.0), (0.0, 0.0), ((-1 / 3600, 0.0), (0.0, 1 / 3600)), 9, 0.1)
    stamp = unpack(pack(image, table, 3.0, solution)).stamps[0]
    corner = stamp.variance_e2[:6, :6] + stamp.sky_e_px
    assert corner.mean() == pytest.approx((SKY_E * SENSITIVITY + READ_NOISE_E**2) / SENSITIVITY**2, rel=0.02)
    empty = expose(np.zeros((300, 300)), SKY_E * SENSITIVITY, READ_NOISE_E, rng) / SENSITIVITY
    assert empty.var() == pytest.approx(corner.mean(), rel=0.02)
