from __future__ import annotations

import subprocess
import sys
import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.almanac.times import bjd_tdb, hjd_utc, light_time_s, night_of
from reduce.settings import Site

TENERIFE = Site(latitude_deg=28.3, longitude_deg=-16.5, height_m=2390.0)
ANGLE = st.floats(0, 360, exclude_max=True)
DECLINATION = st.floats(-90, 90)


def test_arrays_and_numbers_agree():
    mjd = np.array([58000.25, 59000.5, 60000.75])
    together = bjd_tdb(mjd, 10.0, 20.0, TENERIFE)
    assert together.shape == (3,)
    for one, value in zip(mjd, together, strict=True):
        assert bjd_tdb(one, 10.0, 20.0, TENERIFE) == value


@given(mjd=st.floats(44000, 70000), ra_deg=ANGLE, dec_deg=DECLINATION)
def test_light_time_is_bounded_and_without_a_site_21_ms_off_at_most(mjd, ra_deg, dec_deg):
    here = float(light_time_s(mjd, ra_deg, dec_deg, TENERIFE))
    centre = float(light_time_s(mjd, ra_deg, dec_deg, None))
    assert abs(here) < 508.0  # 1.0167 au and the Sun's own 0.01 au about the barycentre
    assert abs(here - centre) < 0.0214  # 6,378 km + 2.4 km
    opposite = float(light_time_s(mjd, ra_deg + 180.0, -dec_deg, TENERIFE))
    assert opposite == pytest.approx(-here, abs=1e-6)


@given(mjd=st.floats(50000, 70000), ra_deg=ANGLE, dec_deg=DECLINATION)
def test_heliocentric_and_barycentric_time_differ_by_the_scales_and_the_suns_wobble(mjd, ra_deg, dec_deg):
    apart_s = float(bjd_tdb(mjd, ra_deg, dec_deg, None) - hjd_utc(mjd, ra_deg, dec_deg, None)) * 86400.0
    assert 57.0 < apart_s < 75.0  # TT - UTC of 1996 to now, less or more 5 s


@pytest.mark.parametrize("mjd", [61000.5, 70000.5, 88000.5])
def test_the_far_future_needs_no_network_and_does_not_warn(mjd: float):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert abs(float(bjd_tdb(mjd, 0.0, 0.0, TENERIFE)) - mjd - 2400000.5) < 0.01


def test_import_is_light():
    code = "import sys, reduce.almanac.times as t; t.bjd_tdb(60000.0, 1.0, 2.0, None); print('astropy' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


@pytest.mark.parametrize(
    ("mjd", "longitude_deg", "night"),
    [
        (60380.10, 0.0, "2024-03-10"),  # 2024-03-11T02:24 at Greenwich: the evening before
        (60380.49, 0.0, "2024-03-10"),
        (60380.51, 0.0, "2024-03-11"),
        (60380.10, None, "2024-03-10"),
        (60380.20, -155.5, "2024-03-10"),  # Hawaii, 04:48 UT = 18:26 local of the 10th
        (60380.60, -155.5, "2024-03-10"),  # 04:02 local of the 11th
        (60380.60, 204.5, "2024-03-10"),  # the same longitude, counted the other way
        (60380.45, 149.1, "2024-03-11"),  # Australia, 10:48 UT = 20:44 local of the 11th
        (60380.75, 149.1, "2024-03-11"),  # 03:56 local of the 12th
    ],
)
def test_night_of(mjd, longitude_deg, night):
    assert night_of(mjd, longitude_deg) == night
