"""One frame laid on another: on pixels that know where they lie on the sky, after astropy.wcs."""

import numpy as np
import pytest
from astropy.wcs import WCS

from reduce.field.registered import registered
from reduce.records import FieldSolution


def a_solution(rotation_deg: float, scale_arcsec: float, centre=(150.0, 20.0), flip: float = -1.0) -> FieldSolution:
    c, s = np.cos(np.radians(rotation_deg)), np.sin(np.radians(rotation_deg))
    step = scale_arcsec / 3600.0
    return FieldSolution(centre, (49.5, 39.5), ((flip * step * c, step * s), (flip * -step * s, step * c)), 20, 0.1)


def as_wcs(solution: FieldSolution) -> WCS:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype, wcs.wcs.crval = ["RA---TAN", "DEC--TAN"], solution.crval_deg
    wcs.wcs.crpix, wcs.wcs.cd = np.array(solution.crpix_px) + 1.0, np.array(solution.cd_deg)
    return wcs


@pytest.mark.parametrize("rotation", [0.0, 33.0, 180.0])
@pytest.mark.parametrize("scale", [0.7, 1.0, 1.6])
def test_each_pixel_comes_from_where_the_sky_says(rotation: float, scale: float) -> None:
    own, onto = a_solution(rotation, scale, (150.003, 19.996)), a_solution(0.0, 1.0)
    rows, columns = np.mgrid[:80, :100]
    code = (1000 * rows + columns).astype(np.float32)  # a pixel's value says which one it was
    laid = registered(code, own, onto, 100, 80)
    x, y = np.meshgrid(np.arange(100.0), np.arange(80.0))
    ra, dec = as_wcs(onto).all_pix2world(x.ravel(), y.ravel(), 0)
    there_x, there_y = as_wcs(own).all_world2pix(ra, dec, 0)
    expected_x, expected_y = there_x.reshape(80, 100), there_y.reshape(80, 100)
    inside = (np.abs(expected_x - 49.5) < 49.4) & (np.abs(expected_y - 39.5) < 39.4)
    assert inside.sum() > 1500
    assert np.isfinite(laid[inside]).all()
    assert np.abs(laid[inside] % 1000 - expected_x[inside]).max() < 0.51
    assert np.abs(laid[inside] // 1000 - expected_y[inside]).max() < 0.51
    outside = (np.abs(expected_x - 49.5) > 50.6) | (np.abs(expected_y - 39.5) > 40.6)
    assert np.isnan(laid[outside]).all()


def test_a_mirrored_frame_is_turned_over_and_the_far_side_of_the_sky_is_empty() -> None:
    code = np.arange(8000, dtype=np.float32).reshape(80, 100)
    laid = registered(code, a_solution(0.0, 1.0, flip=1.0), a_solution(0.0, 1.0), 100, 80)
    assert np.array_equal(laid, code[:, ::-1])
    assert np.isnan(registered(code, a_solution(0.0, 1.0, (330.0, -20.0)), a_solution(0.0, 1.0), 100, 80)).all()
