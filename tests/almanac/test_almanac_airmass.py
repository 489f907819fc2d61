"""Altitudes and airmass, against astropy and between the published formulas."""

from __future__ import annotations

import math

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import AltAz, EarthLocation, SkyCoord
from astropy.time import Time
from astropy.utils import iers
from hypothesis import given
from hypothesis import strategies as st

from reduce.almanac.airmass import (
    airmass,
    altitude_azimuth,
    hardie,
    horizontal,
    hour_angle_at,
    kasten_young,
    pickering,
    transit_altitude,
)
from reduce.settings import Site

SITE = Site(latitude_deg=31.0, longitude_deg=-110.5, height_m=1500.0)
SOUTH = Site(latitude_deg=-30.2, longitude_deg=289.2, height_m=2200.0)


@pytest.mark.parametrize("site", [SITE, SOUTH])
@pytest.mark.parametrize("mjd", [51544.3, 57000.75, 59999.9])
def test_altitudes_are_those_of_astropy(site: Site, mjd: float) -> None:
    place = EarthLocation.from_geodetic(site.longitude_deg, site.latitude_deg, site.height_m)
    rng = np.random.default_rng(1)
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        frame = AltAz(obstime=Time(mjd, format="mjd"), location=place)
        for ra, dec in zip(rng.uniform(0, 360, 20), np.degrees(np.arcsin(rng.uniform(-1, 1, 20))), strict=True):
            theirs = SkyCoord(ra * u.deg, dec * u.deg).transform_to(frame)
            altitude, azimuth = altitude_azimuth(mjd, ra, dec, site)
            assert altitude == pytest.approx(theirs.alt.deg, abs=0.006)  # UT1 - UTC < 0.9 s of rotation
            turned = (azimuth - theirs.az.deg + 180) % 360 - 180
            assert abs(turned) * math.cos(math.radians(altitude)) < 0.006


def test_airmass_follows_the_altitude() -> None:
    seen = 0
    for ra in range(0, 360, 5):
        altitude, _ = altitude_azimuth(59000.3, ra, 10.0, SITE)
        found = airmass(59000.3, ra, 10.0, SITE)
        if altitude < 0:
            assert found is None
        else:
            seen += 1
            assert found is not None
            # Refraction lifts the star: less air than at its true altitude, by a percent at 10 degrees.
            assert found <= pickering(altitude) + 1e-12
            if altitude > 15:
                assert found == pytest.approx(kasten_young(altitude), rel=5e-3)
    assert seen > 20


def test_years_to_come_do_not_warn() -> None:
    assert airmass(75000.2, 10.0, 10.0, SITE) is None or airmass(75000.2, 10.0, 10.0, SITE) >= 1.0


@given(st.floats(0.0, 90.0))
def test_formulas_agree_and_never_fall_below_one(altitude: float) -> None:
    assert pickering(altitude) >= 1.0 - 1e-9
    assert kasten_young(altitude) >= 1.0
    if altitude > 15:
        assert pickering(altitude) == pytest.approx(kasten_young(altitude), rel=3e-3)
        assert hardie(altitude) == pytest.approx(kasten_young(altitude), rel=3e-3)


def test_hardie_refuses_the_horizon() -> None:
    with pytest.raises(ValueError, match="above 5 degrees"):
        hardie(4.0)


@given(st.floats(-89, 89), st.floats(-89, 89), st.floats(-89, 89))
def test_a_star_crosses_the_altitude_at_its_hour_angle(altitude: float, dec: float, latitude: float) -> None:
    hours = hour_angle_at(altitude, dec, latitude)
    top, bottom = transit_altitude(dec, latitude), abs(latitude + dec) - 90.0
    if hours is None:
        assert altitude >= top - 1e-6 or altitude <= bottom + 1e-6
    else:
        assert horizontal(15 * hours, dec, latitude)[0] == pytest.approx(altitude, abs=1e-4)


@given(st.floats(-180, 180), st.floats(-89, 89), st.floats(-89, 89))
def test_stars_west_of_the_meridian_stand_in_the_west(hour_angle: float, dec: float, latitude: float) -> None:
    altitude, azimuth = horizontal(hour_angle, dec, latitude)
    assert -90 <= altitude <= 90
    if 1 < hour_angle < 179 and abs(altitude) < 89:
        assert 180 <= azimuth <= 360
