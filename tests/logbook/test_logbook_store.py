"""What is put into the logbook comes back as it was."""

import os
import sqlite3
import time
from dataclasses import asdict, fields
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from logbook_samples import (
    estimate,
    frame_id,
    host_row,
    info,
    measured,
    no_mounts,
    sequence,
    stars,
    target,
    ticking_clock,
)  # fmt: skip

from reduce.logbook.arrivals import Problem
from reduce.logbook.database import LogbookError, file_system_of
from reduce.logbook.ids import IdMaker
from reduce.logbook.packing import pack_stars, unpack_stars
from reduce.logbook.store import Location, Logbook, Master
from reduce.records import STAR_DTYPE, Measured


def same(one, other):
    for field in fields(one):
        a, b = getattr(one, field.name), getattr(other, field.name)
        if isinstance(a, np.ndarray):
            np.testing.assert_array_equal(a, b)
            assert a.dtype == b.dtype
        else:
            assert a == b, field.name


def test_a_measured_frame_comes_back_bit_equal_with_its_stamps(logbook):
    logbook.add_frame(frame_id(0), {"OBJECT": "x"})
    put = measured(0, stamps=b"pack")
    assert logbook.add_reduction(put)
    (got,) = logbook.newest_reductions()
    same(Measured(**{f.name: b"" if f.name == "stamps" else getattr(put, f.name) for f in fields(put)}), got)
    assert logbook.stamps(put.frame, put.recipe) == b"pack"
    assert logbook.stamps("unknown", "r1") == b""


def test_an_unreadable_frame_has_no_more_than_its_reason(logbook):
    logbook.add_frame(frame_id(0), {})
    put = Measured(frame_id(0), "r1", "unreadable", "the header states no exposure time.")
    logbook.add_reduction(put)
    same(put, logbook.newest_reductions()[0])


def test_a_frame_is_stored_once_for_a_recipe(logbook):
    logbook.add_frame(frame_id(0), {})
    assert logbook.add_reduction(measured(0))
    assert not logbook.add_reduction(measured(0, n_stars=9))
    assert len(logbook.newest_reductions()[0].stars) == 5
    assert logbook.reductions_done() == {(frame_id(0), "r1")}


def test_newest_reduction_wins_unless_a_recipe_is_wanted(logbook):
    for n in (1, 0):
        logbook.add_frame(frame_id(n), {})
        logbook.add_reduction(measured(n, "r1"))
    logbook.add_reduction(measured(0, "r2"))
    assert [(m.frame, m.recipe) for m in logbook.newest_reductions()] == [
        (frame_id(0), "r2"),
        (frame_id(1), "r1"),
    ]
    wanted = {frame_id(0): "r1", frame_id(1): "unknown"}
    assert [m.recipe for m in logbook.newest_reductions(wanted)] == ["r1", "r1"]


def test_a_reduction_needs_its_frame(logbook):
    with pytest.raises(LogbookError, match="refused"):
        logbook.add_reduction(measured(0))
    assert logbook.newest_reductions() == []


def test_two_thousand_frames_are_read_within_a_second(logbook):
    with logbook._database.transaction() as write:
        for n in range(2000):
            write.execute("INSERT INTO frame VALUES (?, '{}', '')", (frame_id(n),))
    logbook.add_reduction(measured(0, n_stars=60))
    row = list(logbook._database.row("SELECT * FROM reduction"))
    with logbook._database.transaction() as write:
        for n in range(1, 2000):
            values = [str(n), frame_id(n), *row[2:]]
            write.execute(f"INSERT INTO reduction VALUES ({', '.join('?' * len(values))})", values)
    start = time.process_time()
    found = logbook.newest_reductions()
    seconds = time.process_time() - start
    assert len(found) == 2000
    assert len(found[-1].stars) == 60
    assert seconds < 1.0


def test_stars_of_an_older_form_keep_the_columns_both_know():
    old = np.zeros(3, [("x_px", "<f8"), ("gone", "<i4"), ("flux_e", "<f8", (STAR_DTYPE["flux_e"].shape[0],))])
    old["x_px"] = [1, 2, 3]
    import json

    got = unpack_stars(old.tobytes(), json.dumps(old.dtype.descr))
    assert got.dtype == STAR_DTYPE
    np.testing.assert_array_equal(got["x_px"], [1, 2, 3])
    assert not got["flux_err_e"].any()


def test_unpacked_stars_can_be_written_to():
    unpack_stars(*pack_stars(stars(2)))["x_px"][0] = 5


def test_locations_and_file_names(logbook):
    for n in (0, 1):
        logbook.add_frame(frame_id(n), {})
    strange = Path(os.fsdecode(b"/data/v\xff\x1b[31m.fits"))
    assert logbook.add_location(frame_id(0), Path("/data/a.fits"), 100, 5)
    assert not logbook.add_location(frame_id(0), Path("/data/a.fits"), 100, 5)
    assert logbook.add_location(frame_id(1), Path("/data/a.fits"), 100, 6)
    assert logbook.add_location(frame_id(0), Path("/data/a.fits"), 100, 5)
    assert logbook.add_location(frame_id(1), strange, 7, 7)
    assert logbook.known_locations() == {
        Path("/data/a.fits"): Location(frame_id(0), 100, 5), strange: Location(frame_id(1), 7, 7),
    }  # fmt: skip
    assert "\x1b" not in logbook.file_names()[frame_id(1)]


def test_headers_are_stored_without_control_characters(logbook):
    assert logbook.add_frame("f", {"OBJECT": "a\x1b]0;evil\x07", "GAIN": 1.5, "BAD": float("nan"), "N\x9b": True})
    assert not logbook.add_frame("f", {})
    assert logbook.header("f") == {"OBJECT": "a·]0;evil·", "GAIN": 1.5, "BAD": None, "N·": True}
    assert logbook.header("unknown") == {}


def test_recipes_and_masters(logbook):
    assert logbook.add_recipe("d", {"version": 1})
    assert not logbook.add_recipe("d", {"version": 1})
    master = Master("m", "flat", {"band": "V", "n": 9}, ("f1", "f2"))
    assert logbook.add_master(master)
    assert not logbook.add_master(master)
    assert logbook.masters() == [master]


def test_sequence(logbook):
    assert logbook.current_sequence() is None
    assert logbook.add_sequence(sequence())
    assert not logbook.add_sequence(sequence())
    assert logbook.add_sequence(sequence(0.1))
    assert logbook.add_sequence(sequence()), "an earlier sequence can become current again"
    got, put = logbook.current_sequence(), sequence()
    assert (got.name, got.ids, set(got.mag)) == (put.name, put.ids, {"B", "V"})
    np.testing.assert_array_equal(got.ra_deg, put.ra_deg)
    for band in put.mag:
        np.testing.assert_array_equal(got.mag[band], put.mag[band])
        np.testing.assert_array_equal(got.mag_err[band], put.mag_err[band])


def test_targets_keep_their_order_and_newest_facts(logbook):
    other = type(target())("other", "other", 1.0, 2.0)
    assert logbook.add_target(target(None))
    assert logbook.add_target(other)
    assert logbook.add_target(target(0.02))
    assert not logbook.add_target(target(0.02))
    assert logbook.targets() == [target(0.02), other]
    superseding = logbook._database.rows("SELECT supersedes FROM target ORDER BY rowid")
    assert [row[0] is None for row in superseding] == [True, True, False]


def test_settings(logbook):
    assert logbook.setting("frames") is None
    assert logbook.set_setting("frames", "/a")
    assert logbook.set_setting("frames", "/b")
    assert not logbook.set_setting("frames", "/b")
    assert logbook.setting("frames") == "/b"


def test_estimates(logbook):
    assert logbook.add_estimate(estimate(33.0), "d1", "first estimate")
    assert not logbook.add_estimate(estimate(33.0), "d1", "again")
    assert logbook.add_estimate(estimate(None), "d2", "dropped frame")
    assert logbook.add_estimate(estimate(33.0), "d1", "undo")
    got, put = logbook.estimate("SN demo", "d1"), estimate(33.0)
    np.testing.assert_array_equal(got.curves[0].mag, put.curves[0].mag)
    without = {"curves"}
    assert {k: v for k, v in asdict(got).items() if k not in without} == {
        k: v for k, v in asdict(put).items() if k not in without
    }
    assert logbook.estimate("SN demo", "unknown") is None
    rows = logbook.history("SN demo")
    assert [(row.mu, row.why) for row in rows] == [
        (33.0, "first estimate"),
        (None, "dropped frame"),
        (33.0, "undo"),
    ]
    assert rows[0].made_at < rows[1].made_at


def test_attempts_count_until_they_end_well(logbook):
    assert logbook.start_attempt("f", "r") == 1
    assert logbook.start_attempt("f", "r") == 2, "the first one never came back"
    logbook.end_attempt("f", "r", "stopped")
    assert logbook.attempts("f", "r") == 1
    assert logbook.start_attempt("f", "other") == 1
    logbook.end_attempt("f", "other", "done")
    assert logbook.attempts("f", "other") == 0


def test_problems_end_with_an_empty_sentence(logbook):
    path = Path("/data/half.fits")
    assert not logbook.add_problem(path, 1, 1, "")
    assert logbook.add_problem(path, 1, 1, "it is shorter than its header says.")
    assert not logbook.add_problem(path, 1, 1, "it is shorter than its header says.")
    assert logbook.problems() == {path: Problem(1, 1, "it is shorter than its header says.")}
    assert logbook.add_problem(path, 2, 2, "")
    assert logbook.problems() == {}


def test_the_stamp_grows_with_changes_of_others(logbook):
    before = logbook.stamp()
    with Logbook.open(logbook.folder, mounts=no_mounts) as other:
        assert other.stamp() == before
        other.note("SN demo", "clouds", "ann")
    assert logbook.stamp() > before
    unchanged = logbook.stamp()
    logbook.start_attempt("f", "r")
    assert logbook.stamp() == unchanged


def test_a_reader_cannot_write_and_sees_what_is_written(logbook):
    with Logbook.open(logbook.folder, readonly=True, mounts=no_mounts) as reader:
        logbook.note("SN demo", "clouds", "ann")
        assert [row.body for row in reader.log()] == ["clouds"]
        with pytest.raises(LogbookError, match="permissions"):
            reader.note("SN demo", "x", "bob")


def test_a_reader_keeps_its_picture_while_another_writes(logbook):
    with Logbook.open(logbook.folder, readonly=True, mounts=no_mounts) as reader:
        with logbook._database.transaction() as write:
            write.execute("INSERT INTO setting VALUES ('a', 'k', 'v', '')")
            assert reader.setting("k") is None
        assert reader.setting("k") == "v"


def test_a_second_writer_waits_no_longer_than_said(logbook, monkeypatch):
    monkeypatch.setattr("reduce.logbook.database.BUSY_TIMEOUT_S", 0.05)
    with (
        Logbook.open(logbook.folder, mounts=no_mounts) as other,
        logbook._database.transaction(),
        pytest.raises(LogbookError, match="another program"),
    ):
        other.note("SN demo", "x", "bob")


def test_creating_twice_opening_nothing_and_strange_files(tmp_path):
    with pytest.raises(LogbookError, match="does not exist"):
        Logbook.open(tmp_path)
    Logbook.create(tmp_path).close()
    with pytest.raises(LogbookError, match="exists already"):
        Logbook.create(tmp_path)
    (tmp_path / "text").mkdir()
    (tmp_path / "text/logbook.db").write_bytes(b"no database at all\n" * 100)
    with pytest.raises(LogbookError, match="damaged or not a logbook"):
        Logbook.open(tmp_path / "text")
    (tmp_path / "other").mkdir()
    with sqlite3.connect(tmp_path / "other/logbook.db") as other:
        other.execute("CREATE TABLE t (x)")
    other.close()
    with pytest.raises(LogbookError, match="is not a logbook"):
        Logbook.open(tmp_path / "other")
    with pytest.raises(LogbookError, match="cannot be made"):
        Logbook.create(tmp_path / "text/logbook.db/below")


def test_a_damaged_file_is_found(tmp_path):
    with Logbook.create(tmp_path) as book:
        for n in range(200):
            book.note("t", f"note {n} " * 20, "ann")
        assert book.check() == ""
    path = tmp_path / "logbook.db"
    raw = bytearray(path.read_bytes())
    raw[8192:24576] = b"\xaa" * 16384
    path.write_bytes(raw)
    for leftover in ("logbook.db-wal", "logbook.db-shm"):
        (tmp_path / leftover).unlink(missing_ok=True)
    with Logbook.open(tmp_path) as book:
        assert "damaged" in book.check()


NETWORK = "rootfs / ext4 rw 0 0\nserver:/x /{place} nfs4 rw 0 0\n"


def test_network_file_systems_get_another_journal_and_a_sentence(tmp_path):
    mounts = NETWORK.replace("{place}", str(tmp_path).lstrip("/"))
    with Logbook.create(tmp_path, mounts=lambda: mounts) as book:
        assert "network file system (nfs4)" in book.notice
        assert book._database.row("PRAGMA journal_mode") == ("delete",)
    with Logbook.open(tmp_path, mounts=no_mounts) as book:
        assert book.notice == ""
        assert book._database.row("PRAGMA journal_mode") == ("wal",)
        assert book._database.row("PRAGMA synchronous") == (2,)


def test_the_longest_mount_that_holds_a_folder_counts():
    table = "a / ext4\nb /home cifs\nc /home/my\\040disk xfs\nshort\n"
    assert file_system_of(Path("/home/me"), table) == "cifs"
    assert file_system_of(Path("/home/my disk/x"), table) == "xfs"
    assert file_system_of(Path("/homes"), table) == "ext4"
    assert file_system_of(Path("/x"), "") == ""


@given(st.lists(st.floats(0, 4e9), min_size=1, max_size=50))
def test_ids_grow_whatever_the_clock_does(seconds):
    from datetime import UTC, datetime

    times = iter(seconds)
    make = IdMaker(lambda: datetime.fromtimestamp(next(times), UTC))
    ids = [make() for _ in seconds]
    assert ids == sorted(set(ids))


def test_the_same_clock_and_random_give_the_same_logbook(tmp_path):
    from logbook_samples import counting_random

    dumps = []
    for name in "ab":
        with Logbook.create(tmp_path / name, clock=ticking_clock(), random=counting_random(), mounts=no_mounts) as book:
            book.add_frame(frame_id(0), {"X": 1})
            book.add_reduction(measured(0))
            book.note("t", "x", "ann")
            dumps.append([book._database.rows(f"SELECT * FROM {t}") for t in ("frame", "reduction", "entry")])
    assert dumps[0] == dumps[1]


def test_the_logbook_loads_no_scientific_library():
    import subprocess
    import sys

    code = (
        "import reduce.logbook.store, reduce.logbook.lock, reduce.logbook.entries, sys;"
        "print([m for m in ('astropy', 'scipy', 'pandas', 'photutils') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_info_survives_with_unknowns(logbook):
    logbook.add_frame(frame_id(3), {})
    logbook.add_reduction(measured(3))
    got = logbook.newest_reductions()[0].info
    assert got == info(3)
    assert got.dec_deg is None
    assert got.binning == (2, 2)


def test_threads_share_a_logbook(logbook):
    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(lambda n: (logbook.note("t", f"note {n}", "ann"), logbook.log()), range(40)))
    rows = logbook.log()
    assert {row.body for row in rows} == {f"note {n}" for n in range(40)}
    assert len({row.id for row in rows}) == 40


def test_a_folder_that_cannot_be_written_is_opened_for_reading(tmp_path, monkeypatch):
    """As on a read-only disk or in somebody else's folder (tests may run as root, who may write everywhere)."""
    with Logbook.create(tmp_path / "c") as book:
        book.note("", "seen", "me")
    monkeypatch.setattr("os.access", lambda path, mode: False)
    with Logbook.open(tmp_path / "c") as book:
        assert book.readonly
        assert [row.body for row in book.log()] == ["seen"]
        assert "cannot be written here" in book.notice
        with pytest.raises(LogbookError):
            book.note("", "lost", "me")


def test_rows_without_host_come_back(logbook):
    logbook.add_frame(frame_id(0), {})
    refused = host_row("j", rows=0, note="the stamp does not reach it")
    logbook.add_host_rows([host_row("i"), refused, host_row("k")])
    logbook.add_host_rows([host_row("i", note="another")])
    found = logbook.host_rows({"i", "j"})
    assert {key[3] for key in found} == {"i", "j"}
    for made in (host_row("i"), refused):
        same(found[made.frame, made.recipe, made.target, made.inputs], made)
    assert {key[3] for key in logbook.host_rows_done()} == {"i", "j", "k"}
