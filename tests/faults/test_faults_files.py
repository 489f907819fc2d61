"""Files as real nights leave them: an unusable one gives one sentence, costs no memory and raises nothing else."""

from __future__ import annotations

import gzip
import io
import os
import sys
import time
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

sys.path.insert(0, str(Path(__file__).parents[1] / "frames"))
from frame_files import SETTINGS, bytes_of, counts, header_of, raw_header, write, write_gzip

from reduce.frames.arrival import completeness
from reduce.frames.inspection import inspect_file
from reduce.frames.reader import frame_id, open_frame
from reduce.records import FrameError

WHOLE = bytes_of(fits.PrimaryHDU(counts(100, 100), header_of()))


def sentence(path: Path) -> str:
    """What a file that cannot be used says; the same in every place that asks."""
    with pytest.raises(FrameError) as caught:
        open_frame(path, SETTINGS).read()
    said = str(caught.value)
    assert said.endswith(".")
    assert said.count(". ") == 0
    assert "\n" not in said
    assert said.isprintable()
    assert inspect_file(path, SETTINGS)["reason"] == said
    return said


def put(path: Path, content: bytes) -> Path:
    path.write_bytes(content)
    return path


def basic(nx: object, ny: object, bitpix: object = 16, naxis: object = 2, *more: str) -> bytes:
    return raw_header(
        f"SIMPLE  = {'T':>20}", f"BITPIX  = {bitpix!s:>20}", f"NAXIS   = {naxis!s:>20}", f"NAXIS1  = {nx!s:>20}",
        f"NAXIS2  = {ny!s:>20}", *more,
    )  # fmt: skip


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "empty (0 bytes)"),
        (b"not an image\n", "not a FITS file"),
        (b"\x89PNG\r\n\x1a\n" + bytes(5000), "not a FITS file"),
        (bytes(28800), "not a FITS file"),
        (WHOLE[:1000], "cut short"),
        (WHOLE[:2880], "holds 2880 of 23040 bytes"),
        (WHOLE[:12000], "holds 12000 of 23040 bytes"),
        (b"SIMPLE  = " + b" " * 2880 * 2, "cut short"),
        (b"SIMPLE  =                    T".ljust(2880) * 4100, "has no end"),
        (basic(1_000_000, 1_000_000), "cannot be true"),
        (basic(20_000, 20_000), "holds 2880 of 800003520 bytes"),
        (basic(-5, 100), "NAXIS1 = -5"),
        (basic("many", 100), "NAXIS1 is not a whole number"),
        (basic(10**30, 100), "damaged"),
        (basic(10, 10, "x"), "BITPIX"),
        (basic(10, 10, 16, 99999), "NAXIS"),
        (basic(0, 0), "no pixels"),
        (raw_header(f"SIMPLE  = {'T':>20}", f"BITPIX  = {8:20}", f"NAXIS   = {0:20}"), "holds no image"),
        (bytes_of(fits.PrimaryHDU(np.zeros((4, 20, 30), np.int16))), "cube of 30 × 20 × 4"),
        (bytes_of(fits.PrimaryHDU(np.zeros((3, 20, 30), np.int16))), "three colour planes"),
        (bytes_of(fits.PrimaryHDU(np.zeros((20, 30, 3), np.int16))), "three colour planes"),
        (bytes_of(fits.PrimaryHDU(np.zeros(100, np.int16))), "row of numbers"),
        (bytes_of(fits.PrimaryHDU(np.full((20, 20), np.nan, np.float32))), "no number at all"),
        (basic(10, 10, 17) + bytes(2880), "damaged"),
    ],
)  # fmt: skip
def test_one_sentence_says_what_is_wrong(tmp_path, content, words):
    assert words in sentence(put(tmp_path / "a.fits", content))


def test_a_table_holds_no_image(tmp_path):
    table = fits.BinTableHDU.from_columns([fits.Column("x", "D", array=np.arange(3.0))])
    assert "holds no image" in sentence(put(tmp_path / "a.fits", bytes_of(fits.PrimaryHDU(), table)))


def test_cut_gzip(tmp_path):
    packed = gzip.compress(WHOLE)
    assert "gzip packing has no end" in sentence(put(tmp_path / "a.fits.gz", packed[: len(packed) // 2]))
    assert "damaged" in sentence(put(tmp_path / "b.fits.gz", packed[:40] + bytes(50) + packed[90:]))
    assert "cut short" in sentence(write_gzip(tmp_path / "c.fits.gz", WHOLE[:12000]))
    assert "not a FITS file" in sentence(write_gzip(tmp_path / "d.fits.gz", b"hello"))


def test_cut_tile_compression(tmp_path):
    content = bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(100, 100), header_of()))
    assert "cut short" in sentence(put(tmp_path / "a.fits.fz", content[: len(content) // 2]))


def test_a_tile_compressed_lie(tmp_path):
    content = bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(100, 100), header_of()))
    at = content.index(b"ZNAXIS1 =")
    lie = b"ZNAXIS1 = " + b"9000000".rjust(20)
    assert "cannot be true" in sentence(put(tmp_path / "a.fits.fz", content[:at] + lie + content[at + 30 :]))


def test_folders_and_missing_files(tmp_path):
    (tmp_path / "a.fits").mkdir()
    assert "folder" in sentence(tmp_path / "a.fits")
    assert "not there" in sentence(tmp_path / "b.fits")
    os.symlink(tmp_path / "nowhere.fits", tmp_path / "c.fits")
    assert "not there" in sentence(tmp_path / "c.fits")


def test_a_pipe_does_not_make_anybody_wait(tmp_path):
    os.mkfifo(tmp_path / "a.fits")
    assert "pipe" in sentence(tmp_path / "a.fits")


def test_a_file_that_may_not_be_read(tmp_path, monkeypatch):
    path = write(tmp_path / "a.fits", counts())

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    # Tests may run as root, who may read everything: the refusal itself is what is imitated
    monkeypatch.setattr("builtins.open", refuse)
    for ask in (lambda: open_frame(path, SETTINGS), lambda: frame_id(path)):
        with pytest.raises(FrameError, match="may not be read; give this account permission"):
            ask()


def test_a_disk_that_fails_while_reading(tmp_path, monkeypatch):
    path = write(tmp_path / "a.fits", counts())

    def fail(*_: object, **__: object) -> None:
        raise OSError(5, "Input/output error")

    monkeypatch.setattr("builtins.open", fail)
    with pytest.raises(FrameError, match=r"cannot be read \(Input/output error\); check the disk"):
        open_frame(path, SETTINGS)


@pytest.mark.parametrize("content", [basic(30_000, 30_000), basic(1_000_000, 1_000_000), basic(30_000, 30_000, -64)])
def test_a_lying_header_costs_no_memory(tmp_path, content):
    path = put(tmp_path / "a.fits", content)
    tracemalloc.start()
    sentence(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 2_000_000


def test_a_packed_bomb_is_stopped_at_its_header(tmp_path):
    path = write_gzip(tmp_path / "a.fits.gz", basic(1_000_000, 1_000_000) + bytes(50_000_000))
    assert "cannot be true" in sentence(path)


def test_a_packed_bomb_whose_header_is_true_is_stopped_too(tmp_path):
    path = write_gzip(tmp_path / "a.fits.gz", basic(10_000, 10_000) + bytes(200_002_560))
    tracemalloc.start()
    assert "would unpack from 0.194 to 200 MB" in sentence(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 2_000_000


def test_what_lies_behind_the_image_of_a_packed_file_is_not_kept(tmp_path):
    content = bytes_of(fits.PrimaryHDU(counts(100, 100), header_of()))
    path = write_gzip(tmp_path / "a.fits.gz", content + bytes(30_000_000))
    frame = open_frame(path, SETTINGS)
    tracemalloc.start()
    np.testing.assert_array_equal(frame.read(), counts(100, 100).astype(np.float32))
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 5_000_000


@pytest.mark.parametrize(
    ("cards", "words"),
    [
        ((f"PCOUNT  = {10**14:20}",), "cut short"),
        ((f"GCOUNT  = {10**14:20}",), "cut short"),
        ((f"PCOUNT  = {10**17:20}",), "PCOUNT = 100000000000000000"),
        ((f"NAXIS   = {10**9:20}",), "states NAXIS twice"),
        ((f"naxis1  = {10**9:20}",), "states NAXIS1 twice"),
        ((f"BITPIX  = {-64:20}",), "states BITPIX twice"),
    ],
)
def test_a_header_that_contradicts_itself(tmp_path, cards, words):
    assert words in sentence(put(tmp_path / "a.fits", basic(10, 10, 16, 2, *cards) + bytes(2880)))


def test_a_frame_of_2_147_483_648_columns(tmp_path):
    assert "cannot be true" in sentence(put(tmp_path / "a.fits", basic(2**31, 1000, 64) + bytes(2880)))


@pytest.mark.parametrize("value", ["0.0", "NaN", "1E400", "'none'"])
def test_a_scale_that_is_no_number(tmp_path, value):
    content = basic(10, 10, 16, 2, f"BSCALE  = {value:>20}") + bytes(2880)
    found = inspect_file(put(tmp_path / "a.fits", content), SETTINGS)
    assert found["usable"] or found["reason"].endswith(".")
    if found["usable"]:
        image = open_frame(tmp_path / "a.fits", SETTINGS).read()
        assert (image[np.isfinite(image)] == 0).all()


def test_a_million_cards(tmp_path):
    path = put(tmp_path / "a.fits", basic(10, 10, 16, 2, *(f"KEY{k:5}= {k:20}" for k in range(100_000))))
    started = time.perf_counter()
    assert "more than 36000 cards" in sentence(path)
    assert time.perf_counter() - started < 2.0


def test_as_many_cards_as_are_allowed(tmp_path):
    cards = [f"K{k:<7}= {k:20}" for k in range(35_000)]
    path = put(tmp_path / "a.fits", basic(10, 10, 16, 2, *cards, "IMAGETYP= 'dark'") + bytes(2880))
    started = time.perf_counter()
    assert open_frame(path, SETTINGS).info.kind == "dark"
    assert time.perf_counter() - started < 5.0


def test_random_groups_are_no_image(tmp_path):
    cards = ("GROUPS  =                    T", "PCOUNT  =                    2", "GCOUNT  =                    3")
    content = basic(0, 10, -32, 2, *cards) + bytes(2880)  # FITS 4.0, section 6: 3 groups of 2 parameters and 10 numbers
    assert "random groups of an interferometer" in sentence(put(tmp_path / "a.fits", content))


@pytest.mark.parametrize(
    ("start", "name"), [(b"BZh91AY", "bzip2"), (b"\xfd7zXZ\0", "xz"), (b"PK\x03\x04", "zip"), (b"\x1f\x9d", "compress")]
)
def test_other_packings_are_named(tmp_path, start, name):
    assert f"packed by {name}; unpack it" in sentence(put(tmp_path / "a.fits", start + bytes(5000)))


def test_tiles_that_lie_outside_the_file(tmp_path):
    content = bytearray(bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(100, 100), header_of())))
    with fits.open(io.BytesIO(bytes(content)), disable_image_compression=True) as units:
        at = units[1].fileinfo()["datLoc"]
    content[at : at + 4] = (2_000_000_000).to_bytes(4, "big")  # bytes of the first tile
    assert "tiles of its compressed image lie outside it" in sentence(put(tmp_path / "a.fits.fz", bytes(content)))


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(at=st.integers(0, len(WHOLE) - 1), junk=st.binary(min_size=1, max_size=200))
def test_damage_anywhere_is_a_sentence_or_a_readable_frame(tmp_path, at, junk):
    path = put(tmp_path / "a.fits", WHOLE[:at] + junk + WHOLE[at + len(junk) :])
    found = inspect_file(path, SETTINGS)
    texts = [found["reason"], *found["notes"], found["object"] or "", found["filter"] or "", found["camera"] or ""]
    assert all(text.isprintable() for text in texts)
    assert found["usable"] or found["reason"].endswith(".")


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(length=st.integers(0, len(WHOLE) - 1))
@example(length=1)  # the first letters of a header are no other kind of file
@example(length=5)
def test_every_length_but_the_whole_is_cut_short(tmp_path, length):
    path = put(tmp_path / "a.fits", WHOLE[:length])
    data_end = len(WHOLE) - (len(WHOLE) - 2880 - 20000)
    if length < data_end:
        assert completeness(path)
        sentence(path)
    else:  # only padding is missing
        assert completeness(path) is None
        open_frame(path, SETTINGS).read()


def test_hostile_names_and_texts_do_not_pass(tmp_path):
    path = tmp_path / "a\x1b[2J\u202e[red].fits"
    path.write_bytes(WHOLE.replace(b"'cam     '", b"'\x1b[31m[b]'"))
    found = inspect_file(path, SETTINGS)
    assert found["usable"]
    for key in ("camera", "object", "filter"):
        assert found[key].isprintable()
    assert all(note.isprintable() for note in found["notes"])
