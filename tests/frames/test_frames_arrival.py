"""A frame is whole or it waits, and a stuck one says why."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from astropy.io import fits
from frame_files import bytes_of, counts, header_of

from reduce.frames.arrival import completeness, is_candidate, scan

WHOLE = bytes_of(fits.PrimaryHDU(counts(), header_of()))


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


@pytest.mark.parametrize("share", [0.3, 0.7, 0.95])
def test_tile_compression_follows_the_size_rule(tmp_path, share):
    content = bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(200, 200), header_of()))
    path = put(tmp_path / "a.fits.fz", content[: int(share * len(content))], 1)
    assert "cut short" in str(completeness(path))
    put(path, content, 2)
    assert completeness(path) is None


def test_a_folder_that_is_gone_is_empty(tmp_path):
    assert scan(tmp_path / "gone") == {}


def test_several_units_must_all_be_there(tmp_path):
    content = bytes_of(fits.PrimaryHDU(header=header_of()), fits.ImageHDU(counts()), fits.ImageHDU(counts()))
    path = put(tmp_path / "a.fits", content[: len(content) - 2880], 1)
    assert "cut short" in str(completeness(path))
    put(path, content, 2)
    assert completeness(path) is None
