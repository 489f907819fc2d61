from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.wcs import WCS
from hypothesis import given
from hypothesis import strategies as st

from reduce.field.wcs import deproject, fit_solution, pixel_to_sky, project, sky_to_pixel, to_header
from reduce.records import FieldSolution


def plate(ra: float, dec: float, scale_arcsec: float, turn_deg: float, mirrored: bool, n: int = 1000) -> FieldSolution:
    scale, turn = scale_arcsec / 3600, math.radians(turn_deg)
    c, s = scale * math.cos(turn), scale * math.sin(turn)
    cd = ((c, s), (-s, c)) if mirrored else ((-c, s), (s, c))
    return FieldSolution((ra, dec), ((n - 1) / 2, (n - 1) / 2), cd, 0, 0.0)


plates = st.builds(
    plate, st.floats(0, 359.999), st.floats(-89.5, 89.5), st.floats(0.1, 10), st.floats(0, 360), st.booleans()
)
pixels = st.lists(st.tuples(st.floats(-200, 1200), st.floats(-200, 1200)), min_size=1, max_size=10)


@given(plates, pixels)
def test_same_as_astropy(solution, spots):
    x, y = np.array(spots).T
    wcs = WCS(to_header(solution))
    ra, dec = pixel_to_sky(solution, x, y)
    ra_ref, dec_ref = wcs.all_pix2world(x, y, 0)
    assert np.abs((ra - ra_ref + 180) % 360 - 180) * np.cos(np.radians(dec)) == pytest.approx(0, abs=1e-10)
    assert dec == pytest.approx(dec_ref, abs=1e-10)
    x_ref, y_ref = wcs.all_world2pix(ra_ref, dec_ref, 0)
    x_own, y_own = sky_to_pixel(solution, ra_ref, dec_ref)
    assert x_own == pytest.approx(x_ref, abs=1e-5)
    assert y_own == pytest.approx(y_ref, abs=1e-5)


@given(plates, pixels)
def test_there_and_back(solution, spots):
    x, y = np.array(spots).T
    x_back, y_back = sky_to_pixel(solution, *pixel_to_sky(solution, x, y))
    assert x_back == pytest.approx(x, abs=1e-5)
    assert y_back == pytest.approx(y, abs=1e-5)


@given(st.floats(0, 359.9), st.floats(-89, 89), st.floats(-3, 3), st.floats(-3, 3))
def test_projection_and_back(ra0, dec0, xi, eta):
    ra, dec = deproject(np.array([xi]), np.array([eta]), ra0, dec0)
    assert 0 <= ra[0] < 360
    xi_back, eta_back = project(ra, dec, ra0, dec0)
    assert (xi_back[0], eta_back[0]) == pytest.approx((xi, eta), abs=1e-9)


@given(plates)
def test_scale_parity_and_rotation_are_what_the_plate_was_made_with(solution):
    # The sky's own geometry says it: one step along +y, seen as offset and position angle on the sphere.
    from astropy.coordinates import SkyCoord

    x, y = solution.crpix_px
    here = SkyCoord(*pixel_to_sky(solution, x, y), unit="deg")
    up = SkyCoord(*pixel_to_sky(solution, x, y + 1), unit="deg")
    right = SkyCoord(*pixel_to_sky(solution, x + 1, y), unit="deg")
    turn = here.position_angle(up).deg
    assert here.separation(up).arcsec == pytest.approx(solution.scale_arcsec, rel=1e-5)
    assert abs((turn - solution.rotation_deg + 180) % 360 - 180) < 0.01
    sideways = (here.position_angle(right).deg - turn) % 360
    assert sideways == pytest.approx(90 if solution.mirrored else 270, abs=0.01)


@given(plates, st.integers(3, 40), st.integers(0, 2**31))
def test_fit_gives_an_exact_plate_back(solution, n, seed):
    x, y = np.random.default_rng(seed).uniform(0, 999, (2, n))
    spread = np.linalg.svd(np.column_stack([x - x.mean(), y - y.mean()]), compute_uv=False)
    if spread[1] < 20:
        return
    ra, dec = pixel_to_sky(solution, x, y)
    fitted = fit_solution(x, y, ra, dec, solution.crpix_px)
    assert fitted.n_matched == n
    assert fitted.rms_px < 1e-4
    corners = np.array([0.0, 999.0, 0.0, 999.0]), np.array([0.0, 0.0, 999.0, 999.0])
    found = sky_to_pixel(fitted, *pixel_to_sky(solution, *corners))
    assert np.hypot(found[0] - corners[0], found[1] - corners[1]).max() < 0.01


def test_rms_is_the_scatter_of_one_coordinate():
    rng, solution = np.random.default_rng(1), plate(150, -20, 1.0, 40, False)
    x, y = rng.uniform(0, 999, (2, 400))
    ra, dec = pixel_to_sky(solution, x, y)
    fitted = fit_solution(x + rng.normal(0, 0.2, 400), y + rng.normal(0, 0.2, 400), ra, dec, solution.crpix_px)
    assert fitted.rms_px == pytest.approx(0.2, rel=0.08)


@pytest.mark.parametrize("x", [[1.0, 2.0], [1.0, 2.0, 3.0]])
def test_too_few_stars_or_all_on_one_line_are_refused(x):
    places = np.array(x)
    with pytest.raises(ValueError, match="plate solution"):
        fit_solution(places, places, 150 + places / 3600, -20 + places / 3600, (0.0, 0.0))


def test_the_far_side_of_the_sky_is_not_a_number():
    x, y = sky_to_pixel(plate(10, 40, 1.0, 0, False), np.array([190.0, 10.0]), np.array([-40.0, 40.0]))
    assert np.isnan([x[0], y[0]]).all()
    assert np.isfinite([x[1], y[1]]).all()
