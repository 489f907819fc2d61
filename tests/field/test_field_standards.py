"""The table of standards, which frames point at one of its fields, and sequences written as files."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from reduce.field.sequence import SequenceError, read_sequence, sequence_lines, write_sequence
from reduce.field.standards import nearest_deg, read_standards, standard_field
from reduce.records import FrameInfo, Sequence

NOWHERE = Path("/nonexistent")
INFO = FrameInfo(
    kind="light", band="V", filter_name="V", object_name="whatever", camera="cam", mjd_mid=60000.0, exposure_s=10.0,
    ra_deg=None, dec_deg=None, scale_arcsec=1.0, gain_e_per_adu=1.0, read_noise_e=5.0, saturation_adu=60000.0,
    nx=500, ny=500,
)  # fmt: skip
OWN = Sequence("own", ("a", "b", "c"), np.array([10.0, 10.1, 359.95]), np.array([41.0, 41.1, -0.02]), {}, {})


@pytest.mark.parametrize(
    ("star", "ra", "dec", "v", "bv", "vr", "ri", "v_err"),
    [
        # Landolt 2009, AJ 137, 4186 (positions, magnitudes); errors of V: Landolt 1992, AJ 104, 340.
        ("RU 149D", 111.064075, -0.546622, 11.480, -0.037, 0.021, 0.008, 0.0019),
        ("PG0918+029D", 140.341400, 2.791189, 12.272, 1.044, 0.575, 0.535, 0.0021),
        ("110 502", 280.792129, 0.461769, 12.330, 2.326, 1.373, 1.250, 0.0031),
        ("114 750", 340.436262, 1.210100, 11.916, -0.037, 0.027, -0.016, 0.0015),
        ("PG0231+051A", 38.416946, 5.294633, 12.768, 0.711, 0.405, 0.388, 0.0008),
    ],
)
def test_table_holds_the_published_values(star, ra, dec, v, bv, vr, ri, v_err):
    table = read_standards(NOWHERE)
    k = table.ids.index(star)
    assert (table.ra_deg[k], table.dec_deg[k]) == (ra, dec)
    assert table.mag["V"][k] == v
    assert table.mag["B"][k] - table.mag["V"][k] == pytest.approx(bv, abs=1e-6)
    assert table.mag["V"][k] - table.mag["R"][k] == pytest.approx(vr, abs=1e-6)
    assert table.mag["R"][k] - table.mag["I"][k] == pytest.approx(ri, abs=1e-6)
    assert table.mag_err["V"][k] == v_err
    assert all((table.mag_err[band] >= table.mag_err["V"] - 1e-9).all() for band in "BRI")


def test_a_frame_belongs_to_the_standards_that_it_points_at():
    table = read_standards(NOWHERE)
    near = replace(INFO, ra_deg=111.2, dec_deg=-0.4)
    found = standard_field(near, table, OWN)
    assert found is not None
    assert set(found.ids) == {"RU 149B", "RU 149D", "RU 149F", "RU 149G"}
    assert standard_field(replace(near, dec_deg=0.3), table, OWN) is None
    assert standard_field(INFO, table, OWN) is None  # a header without a position
    assert standard_field(replace(INFO, ra_deg=191.32, dec_deg=-0.278), table, OWN) is None  # one star is no pattern


def test_the_campaigns_own_field_comes_first():
    table = read_standards(NOWHERE)
    here = replace(INFO, ra_deg=111.06, dec_deg=-0.54)
    beside = replace(OWN, ra_deg=OWN.ra_deg * 0 + 111.3, dec_deg=OWN.dec_deg * 0 - 0.6)
    assert standard_field(here, table, OWN) is not None
    assert standard_field(here, table, beside) is None


def test_distances_work_across_zero_hours_and_to_the_other_side_of_the_sky():
    assert nearest_deg(0.05, -0.02, OWN) == pytest.approx(0.1, rel=1e-3)
    assert nearest_deg(190.0, -41.0, OWN) == float("inf")


def test_an_observers_own_standards_are_used_beside_the_table_and_win(tmp_path):
    (tmp_path / "standards.csv").write_text(
        "id,ra,dec,V,V_err\nRU 149B,111.073217,-0.551717,12.650,0.003\nmine,111.05,-0.50,13.0,0.01\n"
    )
    found = read_standards(tmp_path)
    assert len(found) == len(read_standards(NOWHERE)) + 1
    assert found.mag["V"][found.ids.index("RU 149B")] == 12.650
    assert np.isnan(found.mag["B"][found.ids.index("mine")])
    assert found.ids.count("RU 149B") == 1
    (tmp_path / "standards.csv").write_text("nothing of use\n")
    with pytest.raises(SequenceError, match=r"standards\.csv"):
        read_standards(tmp_path)


def test_what_is_written_is_read_again(tmp_path):
    table = read_standards(NOWHERE)
    mag = {**table.mag, "g": np.where(np.arange(len(table)) % 2, table.mag["V"], np.nan)}
    err = {**table.mag_err, "g": np.where(np.arange(len(table)) % 2, 0.0123, np.nan)}
    write_sequence(tmp_path / "out.csv", replace(table, mag=mag, mag_err=err), ["made of\x1b[31m nothing"])
    again = read_sequence(tmp_path / "out.csv")
    assert again.ids == table.ids
    assert np.allclose(again.ra_deg, table.ra_deg, atol=1e-7)
    for band in ("B", "V", "R", "I", "g"):
        assert np.allclose(again.mag[band], mag[band], atol=6e-5, equal_nan=True)
        assert np.allclose(again.mag_err[band], err[band], atol=6e-5, equal_nan=True)
    assert "\x1b" not in (tmp_path / "out.csv").read_text()
    with pytest.raises(SequenceError, match="exists already"):
        write_sequence(tmp_path / "out.csv", table)
    with pytest.raises(SequenceError, match="cannot be written"):
        write_sequence(tmp_path / "no" / "such" / "out.csv", table)


def test_names_from_outside_become_no_formula_and_no_further_column():
    one = np.array([1.0])
    lines = sequence_lines(Sequence("x", ('=HYPERLINK("a","b")',), one, one, {"V": one}, {"V": one}))
    assert lines[1].startswith("\"HYPERLINK('a','b')\",1.0000000,")
