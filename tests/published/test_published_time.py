"""Time against published examples and an independent library; every row names its source."""

from __future__ import annotations

import numpy as np
import pytest

from reduce.almanac.times import bjd_tdb, hjd_utc, light_time_s, mid_exposure_mjd, mjd_to_jd, tt_minus_utc_s
from reduce.frames.dialect import built_in_dialect
from reduce.frames.header import Header
from reduce.frames.observed_time import mid_time
from reduce.settings import Site

SECOND = 1.0 / 86400.0
KITT_PEAK = Site(latitude_deg=31.9583, longitude_deg=-111.6, height_m=2096.0)


def mjd_of(text: str, exposure_s: float = 0.0) -> float:
    notes: list[str] = []
    mjd = mid_time(Header({"DATE-OBS": text}), built_in_dialect().time, exposure_s, notes)
    assert mjd is not None, notes
    return mjd


@pytest.mark.parametrize(
    ("date_obs", "jd"),
    [
        ("2000-01-01T12:00:00", 2451545.0),  # JD-2000-01-01: Meeus, Astronomical Algorithms ch. 7, table
        ("1957-10-04T19:26:24", 2436116.31),  # JD-1957-10-04: Meeus, example 7.a
        ("1858-11-17T00:00:00", 2400000.5),  # JD-1858-11-17: definition of MJD
        ("1987-01-27T00:00:00", 2446822.5),  # JD-1987-01-27: Meeus ch. 7, table
        ("2011-09-10T12:00:00", 2455815.0),  # JD-2011-09-10: arithmetic
    ],
)
def test_julian_date(date_obs: str, jd: float):
    if date_obs.startswith("1858"):
        assert mjd_to_jd(0.0) == jd
    else:
        assert mjd_to_jd(mjd_of(date_obs)) == pytest.approx(jd, abs=1e-6)


def test_mid_exposure_rolls_over_midnight():
    # TIM-01: meaning of DATE-OBS in FITS 4.0 section 9.5 and arithmetic
    mjd = mjd_of("2024-03-10T23:59:50", 60.0)
    assert mjd == pytest.approx(60380.0002315, abs=1e-7)
    assert mjd_to_jd(mjd) == pytest.approx(2460380.5002315, abs=1e-6)
    assert mid_exposure_mjd(mjd_of("2024-03-10T23:59:50"), 60.0) == mjd


BARYCENTRIC = [
    # BJD-01..04: definition of Eastman, Siverd & Gaudi 2010 (PASP 122, 935), computed with astropy's ERFA ephemeris
    (210.7740, 54.2737, "2011-09-10T03:00:00", 2455814.622870, 2455814.622093, -250.22, -251.12),
    (215.5876, -0.3938, "2007-03-14T09:00:00", 2454173.880010, 2454173.879278, 367.66, 369.63),
    (0.0, 0.0, "2010-09-23T06:00:00", 2455462.756537, 2455462.755796, 498.66, 500.75),
    (50.5238, -15.4009, "2002-10-01T08:00:00", 2452548.838033, 2452548.837305, 341.87, 343.14),
]


@pytest.mark.parametrize(("ra_deg", "dec_deg", "utc", "bjd", "hjd", "to_barycentre_s", "to_sun_s"), BARYCENTRIC)
def test_barycentric_and_heliocentric_time(ra_deg, dec_deg, utc, bjd, hjd, to_barycentre_s, to_sun_s):
    mjd = mjd_of(utc)
    assert float(bjd_tdb(mjd, ra_deg, dec_deg, KITT_PEAK)) == pytest.approx(bjd, abs=0.1 * SECOND)
    assert float(hjd_utc(mjd, ra_deg, dec_deg, KITT_PEAK)) == pytest.approx(hjd, abs=0.1 * SECOND)
    assert float(light_time_s(mjd, ra_deg, dec_deg, KITT_PEAK)) == pytest.approx(to_barycentre_s, abs=0.1)
    assert float(light_time_s(mjd, ra_deg, dec_deg, KITT_PEAK, "heliocentric")) == pytest.approx(to_sun_s, abs=0.1)


@pytest.mark.parametrize(
    ("utc", "seconds"),
    [
        ("2011-09-10T00:00:00", 66.184),  # TSC-01: 34 leap seconds (IERS Bulletin C) + 32.184 s
        ("2023-05-20T00:00:00", 69.184),  # TSC-02: 37 leap seconds (IERS Bulletin C) + 32.184 s
        ("2016-12-31T23:59:59", 68.184),  # IERS Bulletin C 52: the leap second at the end of 2016
        ("2017-01-01T00:00:00", 69.184),  # IERS Bulletin C 52
    ],
)
def test_terrestrial_time(utc: str, seconds: float):
    assert float(tt_minus_utc_s(mjd_of(utc))) == pytest.approx(seconds, abs=1e-9)


def test_agrees_with_astropy_over_half_a_century():
    from astropy import units as u
    from astropy.coordinates import EarthLocation, SkyCoord
    from astropy.time import Time
    from astropy.utils import iers

    rng = np.random.default_rng(5)
    mjd = np.sort(rng.uniform(44000.0, 60000.0, 40))
    place = EarthLocation.from_geodetic(KITT_PEAK.longitude_deg, KITT_PEAK.latitude_deg, KITT_PEAK.height_m)
    star = SkyCoord(123.4 * u.deg, -56.7 * u.deg)
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        times = Time(mjd, format="mjd", scale="utc", location=place)
        theirs = times.tdb + times.light_travel_time(star, "barycentric", ephemeris="builtin")
    late_s = (bjd_tdb(mjd, 123.4, -56.7, KITT_PEAK) - 2400000.5 - theirs.mjd) / SECOND
    assert np.abs(late_s).max() < 1e-4
