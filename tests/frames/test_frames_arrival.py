"""A frame is whole or it waits, and a stuck one says why."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from astropy.io import fits
from frame_files import bytes_of, counts, header_of, write_gzip

from reduce.frames.arrival import GZIP_REST_S, Poller, completeness, is_candidate, scan

WHOLE = bytes_of(fits.PrimaryHDU(counts(), header_of()))


class Clock:
    """Seconds that pass when told to."""

    now = 0.0

    def __call__(self) -> float:
        return self.now


def put(path: Path, content: bytes, mtime: int) -> Path:
    """Write and set the time, as file systems with coarse times would hide a change."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content)
    os.utime(path, (mtime, mtime))
    return path


def test_candidates():
    good = ["a.fits", "A.FIT", "b.fts", "c.fits.fz", "d.fits.gz", "e.fit.GZ"]
    assert all(map(is_candidate, good))
    assert not any(
        map(is_candidate, [".a.fits", "a.fits.part", "a.fits.tmp", "a.txt", "fits", "a.gz", "a.fz", "a.xisf"])
    )


def test_folders_are_searched_below_and_hidden_ones_not(tmp_path):
    for name in ("b/2.fits", "a/x/1.fit", "3.fits", ".hidden/4.fits", "a/.5.fits", "a/6.fits.part"):
        put(tmp_path / name, WHOLE, 1)
    assert [str(path.relative_to(tmp_path)) for path in scan(tmp_path)] == ["3.fits", "a/x/1.fit", "b/2.fits"]


def test_a_folder_that_is_gone_is_empty(tmp_path):
    assert scan(tmp_path / "gone") == {}
    assert Poller(tmp_path / "gone").poll() == []


def test_a_file_that_lies_there_is_given_once(tmp_path):
    path = put(tmp_path / "a.fits", WHOLE, 1)
    poller = Poller(tmp_path, clock=Clock())
    assert [poller.poll() for _ in range(5)] == [[], [], [path], [], []]
    assert poller.waiting() == {}


def test_a_slow_writer_is_waited_for(tmp_path):
    poller = Poller(tmp_path, clock=Clock())
    for k in range(1, 8):
        path = put(tmp_path / "a.fits", WHOLE[: k * 700], k)
        assert poller.poll() == []
        assert poller.waiting() == {path: "the file is still being written."}
    put(path, WHOLE, 9)
    assert [poller.poll() for _ in range(3)] == [[], [], [path]]


def test_a_writer_that_died_is_shown_with_the_reason(tmp_path):
    path = put(tmp_path / "a.fits", WHOLE[:3000], 1)
    poller = Poller(tmp_path, clock=Clock())
    assert [poller.poll() for _ in range(6)] == [[]] * 6
    assert "holds 3000 of 5760 bytes" in poller.waiting()[path]
    put(path, WHOLE, 2)
    assert [poller.poll() for _ in range(3)] == [[], [], [path]]


def test_a_changed_file_is_given_again_and_a_deleted_one_forgotten(tmp_path):
    path = put(tmp_path / "a.fits", WHOLE, 1)
    poller = Poller(tmp_path, clock=Clock())
    assert [poller.poll() for _ in range(3)][2] == [path]
    put(path, WHOLE, 2)
    assert [poller.poll() for _ in range(3)][2] == [path]
    path.unlink()
    assert poller.poll() == []
    assert poller.waiting() == {}


def test_a_preallocating_writer_that_pauses_is_waited_for_when_asked(tmp_path):
    clock = Clock()
    path = put(tmp_path / "a.fits", WHOLE, 1)
    poller = Poller(tmp_path, rest_s=30.0, clock=clock)
    for _ in range(10):
        assert poller.poll() == []
        clock.now += 2.0
    clock.now += 30.0
    assert poller.poll() == [path]


def test_gzip_declares_nothing_outside_and_must_rest(tmp_path):
    clock = Clock()
    path = write_gzip(tmp_path / "a.fits.gz", WHOLE)
    poller = Poller(tmp_path, clock=clock)
    for _ in range(5):
        assert poller.poll() == []
    clock.now += GZIP_REST_S
    assert poller.poll() == [path]


@pytest.mark.parametrize("share", [0.3, 0.7, 0.95])
def test_tile_compression_follows_the_size_rule(tmp_path, share):
    content = bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(200, 200), header_of()))
    path = put(tmp_path / "a.fits.fz", content[: int(share * len(content))], 1)
    assert "cut short" in str(completeness(path))
    put(path, content, 2)
    assert completeness(path) is None


def test_several_units_must_all_be_there(tmp_path):
    content = bytes_of(fits.PrimaryHDU(header=header_of()), fits.ImageHDU(counts()), fits.ImageHDU(counts()))
    path = put(tmp_path / "a.fits", content[: len(content) - 2880], 1)
    assert "cut short" in str(completeness(path))
    put(path, content, 2)
    assert completeness(path) is None


def test_a_thousand_files_are_scanned_quickly(tmp_path):
    import time

    for k in range(1000):
        (tmp_path / f"{k}.fits").write_bytes(b"")
    poller = Poller(tmp_path, clock=Clock())
    start = time.perf_counter()
    poller.poll()
    assert time.perf_counter() - start < 1.0  # 7 ms a thousand here; the bound only finds something quadratic
