"""Projection, centroid and profile figures against published relations; each row names its source."""

from __future__ import annotations

import math

import numpy as np
import pytest

from reduce.field.wcs import pixel_to_sky, project, sky_to_pixel
from reduce.records import FieldSolution
from reduce.stars.centroid import centroid_error
from reduce.stars.detect import background
from reduce.stars.width import gaussian_fwhm, moffat_enclosed, moffat_fwhm

# id, (RA, Dec), tangent point, (xi, eta) in degrees, tolerance: Calabretta & Greisen 2002, A&A 395, 1077, TAN; algebra
GNOMONIC = [
    ("TAN-01", (210.774, 54.2737), (210.8022, 54.3489), (-59.279 / 3600, -270.708 / 3600), 1e-3 / 3600),
    ("TAN-02", (10.3, 41.5), (10.0, 41.0), (0.2246960, 0.5004025), 1e-7),
]


@pytest.mark.parametrize(("row", "sky", "tangent", "expected", "tolerance"), GNOMONIC, ids=[r[0] for r in GNOMONIC])
def test_standard_coordinates(row, sky, tangent, expected, tolerance):
    xi, eta = project(np.array([sky[0]]), np.array([sky[1]]), *tangent)
    assert (xi[0], eta[0]) == pytest.approx(expected, abs=tolerance)


def turned_plate() -> FieldSolution:
    """CRPIX 1024.5 counted from 1; CD = 0.8″/3600 [-cos 15°, sin 15°; sin 15°, cos 15°]."""
    scale, turn = 0.8 / 3600, math.radians(15)
    cd = ((-scale * math.cos(turn), scale * math.sin(turn)), (scale * math.sin(turn), scale * math.cos(turn)))
    return FieldSolution((210.8022, 54.3489), (1023.5, 1023.5), cd, 0, 0.0)


def test_sky_to_pixel():
    x, y = sky_to_pixel(turned_plate(), np.array([210.774]), np.array([54.2737]))
    # TAN-03: astropy.wcs (wcslib), FITS pixels counted from 1
    assert (x[0] + 1, y[0] + 1) == pytest.approx((1008.4933, 678.4666), abs=1e-3)


def test_pixel_to_sky():
    ra, dec = pixel_to_sky(turned_plate(), np.array([499.0]), np.array([1499.0]))
    # TAN-04: astropy.wcs (wcslib), FITS pixel (500, 1500)
    assert (ra[0], dec[0]) == pytest.approx((211.042704, 54.420560), abs=2e-6)


def test_centroid_limit():
    # CEN-01: sigma / (S/N) of a Gaussian image without background, FWHM 3 px, S/N 50
    assert centroid_error(3.0, 50.0) == pytest.approx(0.02548, abs=1e-4)


def test_profiles():
    assert moffat_fwhm(3.0, 2.5) == pytest.approx(3.39150, abs=1e-4)  # MOF-01: Moffat 1969, A&A 3, 455; algebra
    assert moffat_enclosed(4.0, 3.0, 3.0) == pytest.approx(0.87040, abs=1e-4)  # MOF-02: algebra
    assert gaussian_fwhm(1.0) == pytest.approx(2.35482, abs=1e-5)  # 2 sqrt(2 ln 2), algebra


def test_scatter_of_the_sky_is_its_standard_deviation():
    # SKY-01: sigma = 1.482602 MAD for Gaussian statistics; wrong factors show, the clip at 3 sigma costs about 1 %
    data = np.random.default_rng(5).normal(300.0, 17.0, (512, 512)).astype(np.float32)
    level, sigma = background(data, np.zeros(data.shape, bool))
    assert sigma == pytest.approx(17.0, rel=0.015)
    assert float(level.mean()) == pytest.approx(300.0, abs=0.2)
