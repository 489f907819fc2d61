from __future__ import annotations

import numpy as np

from reduce.curve.light_curve import to_light_curve
from reduce.records import Point


def point(mjd: float, band: str = "V", **changes) -> Point:
    values = {
        "star": "invented", "file": None, "night": "2025-03-01", "band": band, "mjd": mjd, "bjd_tdb": None,
        "mag": 15.0, "err": 0.01, "err_night": 0.02, "err_band": 0.03, "flux": 1e4, "flux_err": 92.1,
        "state": "kept", "zp_group": f"ccd/{band}/2025-03-01",
    }  # fmt: skip
    return Point(**(values | changes))


def test_every_number_keeps_its_place():
    curve = to_light_curve([point(60001.0, mag=15.5, err=0.011, err_night=0.022, err_band=0.033)])
    columns = (curve.mjd, curve.mag, curve.err, curve.err_night, curve.err_band, curve.flux, curve.flux_err)
    assert [float(column[0]) for column in columns] == [60001.0, 15.5, 0.011, 0.022, 0.033, 1e4, 92.1]
    assert (str(curve.band[0]), str(curve.night[0])) == ("V", "ccd/V/2025-03-01")


def test_only_kept_points_and_limits_enter_by_time_and_band():
    states = ("doubtful", "dropped", "excluded")
    points = [point(60003.0), point(60001.0, "V"), point(60001.0, "B"), *(point(60002.0, state=s) for s in states)]
    limit = point(60000.0, state="limit", mag=None, err=None, flux=-3.0, flux_err=20.0)
    curve = to_light_curve([*points, limit])
    assert curve.mjd.tolist() == [60000.0, 60001.0, 60001.0, 60003.0]
    assert curve.band.tolist() == ["V", "B", "V", "V"]
    assert np.isnan([curve.mag[0], curve.err[0]]).all()
    assert (curve.flux[0], curve.flux_err[0]) == (-3.0, 20.0)


def test_an_error_that_is_not_stated_is_none_at_night_and_unknown_for_the_band():
    curve = to_light_curve([point(60001.0, err_night=None, err_band=None, zp_group="")])
    assert curve.err_night[0] == 0.0
    assert np.isnan(curve.err_band[0])
    assert curve.night[0] == "2025-03-01"
