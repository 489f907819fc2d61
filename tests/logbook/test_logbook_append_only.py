"""Nothing that was written can be changed or taken away; the form of the file can grow."""

import sqlite3

import pytest
from logbook_samples import estimate, frame_id, host_row, imported_point, measured, no_mounts, sequence, target

from reduce.logbook.database import Database, LogbookError
from reduce.logbook.decisions import STATE, frame_subject
from reduce.logbook.schema import APPEND_ONLY, MIGRATIONS
from reduce.logbook.store import Logbook, Master


@pytest.fixture
def full(logbook, tmp_path):
    logbook.add_frame(frame_id(0), {})
    logbook.add_location(frame_id(0), tmp_path / "a.fits", 1, 1)
    logbook.add_recipe("r", {})
    logbook.add_master(Master("m", "bias", {}, ()))
    logbook.add_reduction(measured(0))
    logbook.add_sequence(sequence())
    logbook.add_target(target())
    logbook.decide(frame_subject(frame_id(0)), STATE, "kept", "", "ann")
    logbook.note("t", "x", "ann")
    logbook.add_estimate(estimate(), "d", "first")
    logbook.set_setting("k", "v")
    logbook.add_host_rows([host_row()])
    logbook.add_imported([imported_point()])
    return logbook


def content(book):
    return {table: book._database.rows(f"SELECT * FROM {table}") for table in APPEND_ONLY}


@pytest.mark.parametrize("table", APPEND_ONLY)
@pytest.mark.parametrize(
    "statement", ["UPDATE {t} SET rowid = rowid + 1", "DELETE FROM {t}", "REPLACE INTO {t} SELECT * FROM {t}"]
)
def test_rows_stay_as_they_were_written(full, table, statement):
    before = content(full)
    assert before[table], "the table holds something that could be lost"
    with pytest.raises(LogbookError, match="only gains rows"), full._database.transaction() as write:
        write.execute(statement.format(t=table))
    assert content(full) == before


@pytest.mark.parametrize("table", APPEND_ONLY)
def test_another_program_cannot_change_rows_either(full, table):
    other = sqlite3.connect(full.folder / "logbook.db")
    try:
        for statement in ("UPDATE {t} SET rowid = rowid + 1", "DELETE FROM {t}"):
            with pytest.raises(sqlite3.IntegrityError, match="only gains rows"):
                other.execute(statement.format(t=table))
    finally:
        other.close()


STEP = "CREATE TABLE extra (x); INSERT INTO extra VALUES (1);"
BROKEN = "CREATE TABLE extra (x); INSERT INTO nowhere VALUES (1);"


def test_an_older_form_is_renewed_after_a_copy(full):
    before = content(full)
    path = full.folder / "logbook.db"
    database = Database(path, mounts=no_mounts, migrations=(*MIGRATIONS, STEP))
    assert database.row("SELECT x FROM extra") == (1,)
    assert database.row("PRAGMA user_version") == (len(MIGRATIONS) + 1,)
    database.close()
    (copy,) = full.folder.glob("*.backup")
    saved = sqlite3.connect(copy)
    try:
        assert saved.execute("PRAGMA user_version").fetchone() == (len(MIGRATIONS),)
        assert saved.execute("SELECT * FROM reduction").fetchall() == before["reduction"]
    finally:
        saved.close()


def test_a_logbook_of_the_first_form_takes_host_light(tmp_path):
    path = tmp_path / "logbook.db"
    Database(path, create=True, mounts=no_mounts, migrations=MIGRATIONS[:1]).close()
    with Logbook.open(tmp_path, mounts=no_mounts) as book:
        book.add_frame(frame_id(0), {})
        book.add_host_rows([host_row()])
        assert len(book.host_rows_done()) == 1


def test_a_logbook_of_the_second_form_takes_points_of_others(tmp_path):
    path = tmp_path / "logbook.db"
    Database(path, create=True, mounts=no_mounts, migrations=MIGRATIONS[:2]).close()
    with Logbook.open(tmp_path, mounts=no_mounts) as book:
        assert book.add_imported([imported_point(0), imported_point(1)]) == 2
        assert book.add_imported([imported_point(1), imported_point(2)]) == 1  # the same point is kept once
        assert book.imported() == [imported_point(0), imported_point(1), imported_point(2)]


def test_a_migration_that_fails_changes_nothing(full):
    path = full.folder / "logbook.db"
    with pytest.raises(LogbookError, match="nowhere"):
        Database(path, mounts=no_mounts, migrations=(*MIGRATIONS, BROKEN))
    assert full._database.row("SELECT count(*) FROM sqlite_master WHERE name = 'extra'") == (0,)
    assert full._database.row("PRAGMA user_version") == (len(MIGRATIONS),)
    assert len(list(full.folder.glob("*.backup"))) == 1
    assert full.check() == ""


def test_a_newer_form_is_refused_and_an_older_one_is_not_read_only(full):
    path = full.folder / "logbook.db"
    with pytest.raises(LogbookError, match="older form"):
        Database(path, readonly=True, mounts=no_mounts, migrations=(*MIGRATIONS, STEP))
    Database(path, mounts=no_mounts, migrations=(*MIGRATIONS, STEP)).close()
    with pytest.raises(LogbookError, match="newer version"):
        Logbook.open(full.folder, mounts=no_mounts)
