"""The night: windows within their limits, what is due, what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from reduce.almanac.sky import moon, sun_altitude, sun_position
from reduce.plan.tonight import (
    due_sentence,
    next_night,
    night_sky,
    safety_cautions,
    sun_separation,
    target_night,
    track,
    twilights,
)
from reduce.records import Point, Target
from reduce.settings import Planning, Site

SITE = Site(latitude_deg=37.9, longitude_deg=-4.6, height_m=820.0)
LIMITS = Planning()
NIGHT = "2025-03-06"


def target(ra_deg: float = 167.5, dec_deg: float = 21.6) -> Target:
    return Target("Farrow 3", "type_ia", ra_deg, dec_deg)


def point(mjd: float, state: str = "kept") -> Point:
    return Point("Farrow 3", None, "", "V", mjd, None, 15.0, 0.02, 0.0, 0.0, 1.0, 0.1, state)


def test_next_night_passes_month_and_year() -> None:
    assert next_night("2024-02-28") == "2024-02-29"
    assert next_night("2025-12-30", 3) == "2026-01-02"


def test_night_runs_from_sunset_to_sunrise() -> None:
    sky = night_sky(NIGHT, SITE)
    assert (sky.sun_altitude_deg < 0).all()
    step = sky.mjd[1] - sky.mjd[0]
    assert sun_altitude(float(sky.mjd[0] - step), SITE) > -0.833
    assert sun_altitude(float(sky.mjd[-1] + step), SITE) > -0.833


def test_twilights_are_nested() -> None:
    found = twilights(NIGHT, SITE)
    assert [name for name, _, _ in found] == ["Sun", "civil", "nautical", "astronomical"]
    assert np.all(np.diff([evening for _, evening, _ in found]) > 0)
    assert np.all(np.diff([morning for _, _, morning in found]) < 0)


def test_midsummer_in_the_north_has_no_dark_window() -> None:
    north = Site(latitude_deg=65.0, longitude_deg=25.0)
    found = target_night(target(250.0, 50.0), night_sky("2025-06-21", north), north, LIMITS, [], 60847.9)
    assert found.window is None
    assert "Sun does not sink" in found.why_not


@settings(max_examples=25, deadline=None)
@given(ra=st.floats(0, 360), dec=st.floats(-89, 89), day=st.integers(0, 360))
def test_window_keeps_every_limit(ra: float, dec: float, day: int) -> None:
    sky = night_sky(next_night("2025-01-01", day), SITE, 1.0 / 24.0)
    where = target(ra, dec)
    found = track(where, sky, SITE, LIMITS)
    for k in np.flatnonzero(found.observable).tolist():
        assert found.altitude_deg[k] >= LIMITS.lowest_altitude_deg
        assert sky.sun_altitude_deg[k] < LIMITS.sun_altitude_deg
        above = moon(float(sky.mjd[k]), ra, dec, SITE)
        assert above.altitude_deg < 0 or above.separation_deg >= LIMITS.moon_separation_deg
    row = target_night(where, sky, SITE, LIMITS, [], float(sky.mjd[0]))
    assert (row.window is None) == (not found.observable.any())
    assert (row.why_not == "") == (row.window is not None)


def test_moon_in_the_way_is_said() -> None:
    sky = night_sky("2025-03-14", SITE)  # total eclipse of 2025-03-14: full Moon
    ra, dec = sun_position(sky.middle)
    found = target_night(target((ra + 180.0) % 360.0, -dec), sky, SITE, LIMITS, [], float(sky.mjd[0]))
    assert found.window is None
    assert "from the Moon" in found.why_not


def test_twilight_near_the_sun_is_refused() -> None:
    """A target 30° east of the Sun stands high enough in twilight, for limits that allow it, and is refused."""
    daring = Planning(lowest_altitude_deg=10.0, sun_altitude_deg=-6.0, moon_separation_deg=0.0)
    sky = night_sky(NIGHT, SITE)
    ra, dec = sun_position(sky.middle)
    near = target((ra + 30.0) % 360.0, dec + 12.0)
    assert sun_separation(near, sky.middle) < 45.0
    found = track(near, sky, SITE, daring)
    bright = sky.sun_altitude_deg > -18.0
    would = (found.altitude_deg > 10.0) & (sky.sun_altitude_deg < -6.0) & bright
    assert would.any()
    assert not (found.observable & bright).any()
    row = target_night(near, sky, SITE, daring, [], float(sky.mjd[0]))
    assert "from the Sun" in safety_cautions([("Farrow 3", row)])[0]


def test_far_from_the_sun_only_the_general_caution_stands() -> None:
    row = target_night(target(), night_sky(NIGHT, SITE), SITE, LIMITS, [], 60741.0)
    (general,) = safety_cautions([("Farrow 3", row)])
    assert "Local rules" in general


@pytest.mark.parametrize(
    ("mjds", "now", "due", "words"),
    [
        ((), 60000.0, True, "no point yet"),
        ((59996.9,), 60000.0, True, "3.1 d ago"),
        ((59996.9, 59999.0), 60000.0, False, "due in 1.0 d"),
        ((60001.0,), 60000.0, True, "no point yet"),  # points of nights to come do not count
    ],
)
def test_due(mjds: tuple[float, ...], now: float, due: bool, words: str) -> None:
    found, sentence = due_sentence([point(mjd) for mjd in mjds], now, 2.0)
    assert found is due
    assert words in sentence


def test_dropped_points_do_not_count_as_observed() -> None:
    assert due_sentence([point(59999.9, "dropped")], 60000.0, 2.0)[0]
