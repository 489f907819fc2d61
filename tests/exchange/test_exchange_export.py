"""Exported tables are read back by the reference library and say what they hold."""

import csv
import io
import json
import math

import numpy as np
import pytest
from astropy.table import Table
from hypothesis import given
from hypothesis import strategies as st

from reduce.exchange.export import EXPORT_KEYS, ExportError, write_points
from reduce.exchange.point_json import ESTIMATE_KEYS, PULSATION_KEYS, estimate_to_json, point_to_json
from reduce.records import BudgetLine, Caution, Estimate, FitCurve, Point, Target

NIGHT = Point(
    star="SN demo", file=None, night="2026-03-01", band="V", mjd=61000.123456789, bjd_tdb=2461000.626, mag=15.25,
    err=0.01, err_night=0.005, err_band=0.02, flux=7943.2823, flux_err=73.0, state="kept",
    flags=("saturated", "crowded"), zp_group="cam/V/2026-03-01",
)  # fmt: skip
LIMIT = Point(
    star="SN demo", file="a.fits", night="2026-03-02", band="B", mjd=61001.0, bjd_tdb=None, mag=None, err=None,
    err_night=None, err_band=None, flux=-3.0, flux_err=float("nan"), state="limit", provisional=True,
)  # fmt: skip
TARGET = Target("SN demo", "type_ia", 150.0, 20.0, z=0.01)


def text_of(points, style, **more):
    stream = io.StringIO()
    assert write_points(points, TARGET, stream, style, **more) == len(points)
    return stream.getvalue()


def test_ecsv_is_read_back_with_units_masks_and_head():
    text = text_of([NIGHT, LIMIT], "ecsv", meta={"version": "0.1", "scale": "H0 = 73.04 km/s/Mpc"})
    table = Table.read(text, format="ascii.ecsv")
    assert tuple(table.colnames) == EXPORT_KEYS
    for key in ("mjd", "mag", "err", "err_night", "err_band", "flux", "flux_err", "bjd_tdb"):
        assert table[key][0] == getattr(NIGHT, key), key
    for key in ("mag", "err", "err_night", "err_band", "bjd_tdb", "flux_err"):
        assert table[key].mask[1], key
    assert str(table["mag"].unit) == "mag"
    assert str(table["mjd"].unit) == "d"
    assert "UTC" in table["mjd"].description
    assert "TDB" in table["bjd_tdb"].description
    assert list(table["state"]) == ["kept", "limit"]
    assert table["flags"][0] == "saturated crowded"
    assert list(table["provisional"]) == [False, True]
    assert table.meta["time_scale"] == {"mjd": "UTC", "bjd_tdb": "TDB"}
    assert table.meta["target"]["z_heliocentric"] == 0.01
    assert table.meta["target"]["ebv_mw"] is None
    assert table.meta["scale"] == "H0 = 73.04 km/s/Mpc"


@pytest.mark.parametrize("style", ["ecsv", "csv"])
def test_no_points_give_the_header_alone(style):
    text = text_of([], style)
    table = Table.read(text, format=f"ascii.{style}")
    assert len(table) == 0
    assert tuple(table.colnames) == EXPORT_KEYS


def test_csv_has_one_header_line_and_plain_numbers():
    rows = list(csv.DictReader(io.StringIO(text_of([NIGHT, LIMIT], "csv"))))
    assert tuple(rows[0]) == EXPORT_KEYS
    assert float(rows[0]["mjd"]) == NIGHT.mjd
    assert rows[1]["flux"] == "-3.0", "a negative number is no formula"
    assert rows[1]["mag"] == rows[1]["flux_err"] == ""
    assert [row["provisional"] for row in rows] == ["false", "true"]


HOSTILE = ["=1+1", "+cmd", "-2", "@SUM(A1)", "\t=1", "\r=1", " =1", "a\nb", 'q"uote,', "\x1b[31m", "x\u202ey"]


@pytest.mark.parametrize("name", HOSTILE)
@pytest.mark.parametrize("style", ["ecsv", "csv"])
def test_hostile_names_are_harmless(style, name):
    from dataclasses import replace

    point = replace(NIGHT, star=name, file=name, flags=(name,))
    text = text_of([point, NIGHT], style)
    assert all(c >= " " or c == "\n" for c in text)
    assert "\u202e" not in text
    table = Table.read(text, format=f"ascii.{style}")
    assert len(table) == 2
    if style == "csv":
        for row in csv.DictReader(io.StringIO(text)):
            assert not row["star"].startswith(("=", "+", "-", "@", "\t", "\r"))


@given(st.text(max_size=30), st.floats(allow_nan=True, allow_infinity=True), st.none() | st.floats())
def test_any_point_survives_both_forms(name, flux, mag):
    from dataclasses import replace

    point = replace(NIGHT, star=name, flux=flux, mag=mag)
    row = next(csv.DictReader(io.StringIO(text_of([point], "csv"))))
    table = Table.read(text_of([point], "ecsv"), format="ascii.ecsv")
    for key, value in (("flux", flux), ("mag", mag)):
        if value is None or not math.isfinite(value):
            assert row[key] == ""
            assert np.ma.is_masked(table[key][0])
        else:
            assert float(row[key]) == value
            assert table[key][0] == value


def test_a_name_like_a_comment_loses_no_row():
    from dataclasses import replace

    table = Table.read(text_of([replace(NIGHT, star="#1"), NIGHT], "ecsv"), format="ascii.ecsv")
    assert list(table["star"]) == ["'#1", NIGHT.star]


def test_a_file_is_replaced_as_a_whole(tmp_path, monkeypatch):
    path = tmp_path / "curve.ecsv"
    write_points([NIGHT], TARGET, path)
    before = path.read_text()
    assert len(Table.read(path, format="ascii.ecsv")) == 1

    def full(_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("reduce.exchange.export.os.fsync", full)
    with pytest.raises(ExportError, match=r"curve.ecsv cannot be written: No space left on device; choose"):
        write_points([NIGHT, LIMIT], TARGET, path)
    assert path.read_text() == before
    assert [p.name for p in tmp_path.iterdir()] == ["curve.ecsv"]
    with pytest.raises(ExportError, match="cannot be written"):
        write_points([NIGHT], TARGET, tmp_path / "none" / "x.csv", "csv")


def test_point_json_has_exactly_the_frozen_keys_and_no_nan():
    row = point_to_json(LIMIT)
    # the keys that DEVELOPERS.md promises to scripts
    promised = (
        "star file night band mjd bjd_tdb mag err err_night err_band flux flux_err state flags host_method "
        "zp_group provisional"
    )
    assert list(row) == promised.split()
    assert row["flux_err"] is None
    assert row["mag"] is None
    assert json.loads(json.dumps(row, allow_nan=False)) == row
    assert point_to_json(NIGHT)["flags"] == ["saturated", "crowded"]


def test_estimate_json_has_no_nan():
    estimate = Estimate(
        target="SN demo", kind="type_ia", mu=33.0, mu_err=0.1, mu_err_fit=math.nan, t_max=61000.0, t_max_err=0.1,
        dm15=1.1, dm15_err=0.1, e_host=None, e_host_err=None, chi2=3.0, n=9, verdict="μ stands", scale="x",
        warnings=(Caution("late", "why"),), budget=(BudgetLine("fit", 0.1),),
        curves=(FitCurve("V", np.array([1.0]), np.array([np.nan]), np.array([0.1])),), peak_mag={"B": math.inf},
    )  # fmt: skip
    row = estimate_to_json(estimate)
    assert json.loads(json.dumps(row, allow_nan=False)) == row
    assert row["mu_err_fit"] is None
    assert row["warnings"] == [{"name": "late", "evidence": "why", "doubts_type": False}]
    assert row["peak_mag"] == {"B": None}
    assert tuple(row) == ESTIMATE_KEYS + PULSATION_KEYS
