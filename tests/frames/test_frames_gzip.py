"""Files packed by gzip: whole or not by their end, unpacked once, their check sum looked at."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from frame_files import SETTINGS, bytes_of, counts, header_of, write_gzip
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from reduce.frames.arrival import completeness, scan
from reduce.frames.extent import declared_units
from reduce.frames.reader import open_frame
from reduce.records import FrameError

ONE = bytes_of(fits.PrimaryHDU(counts(300, 400), header_of()))
TWO = bytes_of(fits.PrimaryHDU(header=header_of()), fits.ImageHDU(counts(300, 400)), fits.ImageHDU(counts()))


class Unpacked:
    """How many bytes came out of gzip."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.n = 0
        read = gzip.GzipFile.read

        def counted(file: gzip.GzipFile, size: int | None = -1) -> bytes:
            data = read(file, size)
            self.n += len(data)
            return data

        monkeypatch.setattr(gzip.GzipFile, "read", counted)


@settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(share=st.floats(0, 1, exclude_max=True), which=st.sampled_from([0, 1]))
def test_a_file_still_being_written_lacks_something(tmp_path, share, which):
    packed = gzip.compress((ONE, TWO)[which], 1, mtime=0)
    path = tmp_path / "a.fits.gz"
    path.write_bytes(packed[: int(share * len(packed))])
    assert completeness(path) is not None
    path.write_bytes(packed)
    assert completeness(path) is None


def test_room_that_was_reserved_is_not_a_whole_file(tmp_path):
    packed = gzip.compress(ONE, 1, mtime=0)
    path = tmp_path / "a.fits.gz"
    path.write_bytes(packed[:10_000].ljust(len(packed), b"\0"))
    assert "gzip packing" in str(completeness(path))
    with pytest.raises(FrameError, match="gzip packing"):
        open_frame(path, SETTINGS)


def test_a_whole_file_is_known_by_its_end_and_unpacked_once(tmp_path, monkeypatch):
    path = write_gzip(tmp_path / "a.fits.gz", ONE)
    unpacked = Unpacked(monkeypatch)
    assert completeness(path) is None
    assert declared_units(path)[0].end == len(ONE)
    assert unpacked.n <= 3 * 2880  # the header, each time
    frame = open_frame(path, SETTINGS)
    before = unpacked.n
    assert before <= 8 * 2880
    np.testing.assert_array_equal(frame.read(), counts(300, 400).astype(np.float32))
    assert unpacked.n - before < 1.1 * len(ONE)


@pytest.mark.parametrize("content", [ONE, TWO])
def test_units_and_members(tmp_path, content):
    whole = write_gzip(tmp_path / "a.fits.gz", content)
    parts = tmp_path / "b.fits.gz"  # several members, as gzip allows
    parts.write_bytes(gzip.compress(content[:5000]) + gzip.compress(content[5000:]))
    padded = tmp_path / "c.fits.gz"  # and zeros behind them
    padded.write_bytes(gzip.compress(content) + bytes(512))
    for path in (whole, parts, padded):
        assert completeness(path) is None
        np.testing.assert_array_equal(open_frame(path, SETTINGS).read(), counts(300, 400).astype(np.float32))


def test_an_unpadded_last_block(tmp_path):
    content = ONE[: 2880 + 2 * 300 * 400]
    path = write_gzip(tmp_path / "a.fits.gz", content)
    assert completeness(path) is None
    assert open_frame(path, SETTINGS).read().shape == (300, 400)


@pytest.mark.parametrize("back", [1, 6, 5000])
def test_damage_is_told_by_the_check_sum(tmp_path, back):
    packed = bytearray(gzip.compress(ONE, 0, mtime=0))  # stored, so that only the check sum can tell
    packed[-8 - back if back > 8 else -back] ^= 0x10
    path = tmp_path / "a.fits.gz"
    path.write_bytes(bytes(packed))
    with pytest.raises(FrameError, match=r"gzip packing is damaged|cut short"):
        open_frame(path, SETTINGS).read()


@pytest.mark.parametrize("name", ["A.FITS.GZ", "b.Fit.gz", "c.fts", "d.FIT", "e.fits.FZ"])
def test_names_in_capitals(tmp_path, name):
    path = tmp_path / name
    path.write_bytes(gzip.compress(ONE) if name.lower().endswith("gz") else ONE)
    assert list(scan(tmp_path)) == [path]
    assert open_frame(path, SETTINGS).info.kind == "light"


def test_rows_without_the_rest(tmp_path):
    path: Path = write_gzip(tmp_path / "a.fits.gz", ONE)
    np.testing.assert_array_equal(open_frame(path, SETTINGS).read_rows(7, 9), counts(300, 400)[7:9].astype(np.float32))
