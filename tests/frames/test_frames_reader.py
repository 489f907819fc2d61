"""Every shape a FITS file comes in gives the same pixels."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from frame_files import SETTINGS, bytes_of, counts, header_of, raw_header, write, write_gzip

from reduce.frames.inspection import inspect_file
from reduce.frames.reader import frame_id, iso_time, open_frame
from reduce.records import FrameError


def check(path: Path, expected: np.ndarray) -> None:
    frame = open_frame(path, SETTINGS)
    assert (frame.info.kind, frame.info.band, frame.info.exposure_s) == ("light", "V", 60.0)
    assert (frame.info.ny, frame.info.nx) == expected.shape
    image = frame.read()
    assert image.dtype == np.float32
    assert image.flags.c_contiguous
    np.testing.assert_array_equal(image, expected.astype(np.float32))
    np.testing.assert_array_equal(frame.read_rows(7, 19), image[7:19])


@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint16", "int32", "uint32", "float32", "float64", ">f4", ">i2"])
def test_every_number_type(tmp_path, dtype):
    data = (counts() % 200).astype(dtype)
    check(write(tmp_path / "a.fits", data), data)


def test_bzero_and_bscale(tmp_path):
    stored = (counts() % 1000).astype(">i2")
    numbers = {"BITPIX": 16, "NAXIS": 2, "NAXIS1": 40, "NAXIS2": 30, "BSCALE": 0.5, "BZERO": 1000.0, "BLANK": 17}
    cards = [
        f"SIMPLE  = {'T':>20}", *(f"{key:8}= {value:>20}" for key, value in numbers.items()),
             "IMAGETYP= 'light'", "DATE-OBS= '2024-03-10T23:59:50'", f"EXPTIME = {60.0:20}", "FILTER  = 'V'",
    ]  # fmt: skip
    path = tmp_path / "a.fits"
    path.write_bytes(raw_header(*cards) + stored.tobytes().ljust(2880, b"\0"))
    expected = np.where(stored == 17, np.nan, stored * 0.5 + 1000.0)
    assert np.isnan(expected).any()
    check(path, expected)


@pytest.mark.parametrize("unit", [fits.ImageHDU, fits.CompImageHDU])
def test_the_science_extension_is_found_and_inherits(tmp_path, unit):
    other, science = counts(seed=2), counts(seed=3)
    path = tmp_path / "a.fits"
    path.write_bytes(
        bytes_of(fits.PrimaryHDU(header=header_of()), unit(other, name="WEIGHT"), unit(science, name="SCI"))
    )
    check(path, science)
    frame = open_frame(path, SETTINGS)
    assert frame.info.extension == 2
    assert "2 images" in " ".join(frame.info.notes)
    assert frame.header["FILTER"] == "V"


def test_the_first_image_extension_is_used(tmp_path):
    table = fits.BinTableHDU.from_columns([fits.Column("x", "D", array=np.arange(3.0))])
    path = tmp_path / "a.fits"
    path.write_bytes(bytes_of(fits.PrimaryHDU(header=header_of()), table, fits.ImageHDU(counts())))
    check(path, counts())


@pytest.mark.parametrize("packing", ["RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1"])
def test_tile_compression(tmp_path, packing):
    path = tmp_path / "a.fits.fz"
    path.write_bytes(bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(counts(), header_of(), compression_type=packing)))
    check(path, counts())


def test_gzip_by_content_whatever_the_name(tmp_path):
    content = bytes_of(fits.PrimaryHDU(counts(), header_of()))
    check(write_gzip(tmp_path / "a.fits.gz", content), counts())
    check(write_gzip(tmp_path / "b.fits", content), counts())
    path = tmp_path / "c.fits.gz"
    path.write_bytes(content)
    check(path, counts())


def test_degenerate_axes_are_no_cube(tmp_path):
    path = write(tmp_path / "a.fits", counts()[None])
    check(path, counts())


def test_an_unpadded_last_block_is_whole(tmp_path):
    content = bytes_of(fits.PrimaryHDU(counts(50, 50), header_of()))
    path = tmp_path / "a.fits"
    path.write_bytes(content[: 2880 + 5000])
    check(path, counts(50, 50))


def test_overscan_is_subtracted_and_said(tmp_path):
    data = counts()
    path = write(tmp_path / "a.fits", data, TRIMSEC="[3:38, 2:30]", BIASSEC="[39:40,1:30]")
    check(path, data[1:30, 2:38])
    assert "overscan was subtracted and cut off" in " ".join(open_frame(path, SETTINGS).info.notes)


@pytest.mark.parametrize(
    ("section", "note"),
    [("[1:40,1:30]", None), ("[1:80,1:60]", "does not lie on"), ("all", "cannot be read"), ("[9:3,1:30]", "does not")],
)
def test_other_sections_leave_the_image_whole(tmp_path, section, note):
    path = write(tmp_path / "a.fits", counts(), TRIMSEC=section)
    check(path, counts())
    notes = open_frame(path, SETTINGS).info.notes
    assert (note in " ".join(notes)) if note else notes == ()


def test_a_card_that_breaks_the_rules_is_left_out_with_the_rest_understood(tmp_path):
    path = write(tmp_path / "a.fits", counts(), OBJECT="Field 7")
    content = path.read_bytes()
    bad = b"BROKEN  = 'no closing quote".ljust(80)
    worse = b"OBSERVER= \x1b[31m\xff".ljust(80)
    at = content.index(b"END" + b" " * 77)
    path.write_bytes(content[:at] + bad + worse + content[at:].replace(b" " * 160, b"", 1))
    check(path, counts())
    assert open_frame(path, SETTINGS).info.object_name == "Field 7"


def test_a_frame_is_named_by_its_bytes(tmp_path):
    path = write(tmp_path / "a.fits", counts())
    assert frame_id(path) == hashlib.sha256(path.read_bytes()).hexdigest()
    with pytest.raises(FrameError, match="not there"):
        frame_id(tmp_path / "b.fits")


def test_reading_rows_does_not_read_the_file(tmp_path):
    import tracemalloc

    path = write(tmp_path / "a.fits", np.zeros((4000, 1000), np.uint16))
    frame = open_frame(path, SETTINGS)
    frame.read_rows(0, 1)
    tracemalloc.start()
    frame.read_rows(2000, 2010)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 400_000  # 10 rows are 20 kB stored, 40 kB as float32; the file has 8 MB


def test_inspect_says_everything_as_plain_data(tmp_path):
    cards = {
        "RA": "12 34 56.7", "DEC": "-00 30 15", "GAIN": 1.4, "RDNOISE": 8.0, "OBJECT": "Field 7", "CCD-TEMP": -20.0,
        "XPIXSZ": 9.0, "FOCALLEN": 2000.0, "XBINNING": 2, "YBINNING": 2,
    }  # fmt: skip
    path = write(tmp_path / "a.fits", counts(), **cards)
    found = inspect_file(path, SETTINGS)
    json.dumps(found, allow_nan=False)
    assert found.pop("notes") == [
        "the scale follows from pixel size and focal length, the size taken as that of a binned pixel."
    ]
    assert found.pop("ra_deg") == pytest.approx(188.73625)
    assert found.pop("dec_deg") == pytest.approx(-0.504167, abs=1e-6)
    assert found.pop("scale_arcsec") == pytest.approx(0.928191, rel=1e-6)
    assert found.pop("mjd_mid") == pytest.approx(60380.0002315, abs=1e-7)
    assert found == {
        "file": str(path), "usable": True, "kind": "light", "band": "V", "filter": "V",
        "mid_time": "2024-03-11T00:00:20.000", "exposure_s": 60.0, "gain_e_per_adu": 1.4, "read_noise_e": 8.0,
        "saturation_adu": None, "nx": 40, "ny": 30, "binning": [2, 2], "temperature_c": -20.0, "camera": "cam",
        "object": "Field 7", "calibrated": [], "reason": "",
    }  # fmt: skip


def test_inspect_of_a_bad_file_has_the_same_keys(tmp_path):
    good, bad = write(tmp_path / "a.fits", counts()), tmp_path / "b.fits"
    bad.write_bytes(b"")
    found = inspect_file(bad, SETTINGS)
    assert found.keys() == inspect_file(good, SETTINGS).keys()
    assert (found["usable"], found["kind"], found["exposure_s"]) == (False, None, None)
    assert found["reason"] == "the file is empty (0 bytes); copy it again."


def test_iso_time():
    assert iso_time(60380.0002315) == "2024-03-11T00:00:20.002"
    assert iso_time(51544.0) == "2000-01-01T00:00:00.000"


def test_the_reader_is_imported_without_astropy():
    code = "import sys, reduce.frames.reader, reduce.frames.calibrate; print('astropy' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
