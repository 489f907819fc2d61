"""Sun, Moon and twilight, against astropy's bodies."""

from __future__ import annotations

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body
from astropy.time import Time
from astropy.utils import iers

from reduce.almanac.sky import moon, separation_deg, sun_altitude, twilight
from reduce.almanac.times import night_of
from reduce.settings import Site

SITE = Site(latitude_deg=31.0, longitude_deg=-110.5, height_m=1500.0)
SOUTH = Site(latitude_deg=-30.2, longitude_deg=149.1, height_m=1100.0)
ARCTIC = Site(latitude_deg=69.6, longitude_deg=18.9)


@pytest.mark.parametrize("site", [SITE, SOUTH])
@pytest.mark.parametrize("mjd", [51544.3, 57000.75, 58123.05, 59999.9])
def test_sun_and_moon_are_where_astropy_has_them(site: Site, mjd: float) -> None:
    place = EarthLocation.from_geodetic(site.longitude_deg, site.latitude_deg, site.height_m)
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        time = Time(mjd, format="mjd")
        frame = AltAz(obstime=time, location=place)
        sun = get_body("sun", time, place).transform_to(frame)
        body = get_body("moon", time, place)
        theirs = body.transform_to(frame)
        star = SkyCoord(80.0 * u.deg, 12.0 * u.deg).transform_to(frame)
        apart = theirs.separation(star).deg
    found = moon(mjd, 80.0, 12.0, site)
    assert sun_altitude(mjd, site) == pytest.approx(sun.alt.deg, abs=0.015)
    assert found.altitude_deg == pytest.approx(theirs.alt.deg, abs=0.015)
    assert found.separation_deg == pytest.approx(apart, abs=0.015)


@pytest.mark.parametrize("site", [SITE, SOUTH])
@pytest.mark.parametrize("sun_deg", [-0.833, -6.0, -12.0, -18.0])
def test_twilight_is_where_the_sun_crosses(site: Site, sun_deg: float) -> None:
    found = twilight("2025-03-20", site, sun_deg)
    assert found is not None
    dusk, dawn = found
    assert sun_altitude(dusk, site) == pytest.approx(sun_deg, abs=1e-3)
    assert sun_altitude(dawn, site) == pytest.approx(sun_deg, abs=1e-3)
    assert dusk < dawn
    assert night_of(dusk, site.longitude_deg) == night_of(dawn, site.longitude_deg) == "2025-03-20"
    for mjd in np.linspace(dusk + 0.001, dawn - 0.001, 20):
        assert sun_altitude(float(mjd), site) < sun_deg


def test_white_nights_and_polar_nights() -> None:
    assert twilight("2025-06-21", ARCTIC, -6.0) is None
    found = twilight("2025-12-21", ARCTIC, -0.833)
    assert found is not None
    assert found[1] - found[0] == pytest.approx(1.0), "the Sun does not rise"


def test_separation_of_near_and_opposite_directions() -> None:
    assert separation_deg(10.0, 20.0, 10.0, 20.0 + 1e-7) == pytest.approx(1e-7, rel=1e-6)
    assert separation_deg(10.0, 20.0, 190.0, -20.0) == pytest.approx(180.0)
