"""Damaged files of every form, read in a process with little memory: a frame or a sentence, soon, and no crash."""

from __future__ import annotations

import gzip
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

sys.path.insert(0, str(Path(__file__).parents[1] / "frames"))
from frame_files import bytes_of, counts, header_of

PROGRAM = Path(__file__).with_name("damaged_files.py")
COUNT = 120


def rich_header() -> fits.Header:
    """Long texts, hierarchical keywords, history, odd types."""
    header = header_of(TRIMSEC="[1:80,1:60]", BIASSEC="[75:80,1:60]", BUNIT="adu", RA="12 34 56", DEC="-00 30 15")
    header["HIERARCH ESO DET OUT1 CONAD"] = 1.3
    header["LONGTEXT"] = "a text that goes on over more than one card of the header, " * 4
    header["HISTORY"] = "flat field not applied"
    header["MJD-OBS"] = 60379.99988426
    return header


def scaled() -> bytes:
    unit = fits.PrimaryHDU(counts(60, 80).astype(np.float32) / 3)
    unit.scale("int16", bzero=9000.0, bscale=0.5)
    return bytes_of(unit)


def tiled(packing: str, data: np.ndarray) -> bytes:
    return bytes_of(fits.PrimaryHDU(), fits.CompImageHDU(data, header_of(), compression_type=packing))


FORMS = {
    "plain.fits": lambda: bytes_of(fits.PrimaryHDU(counts(60, 80), rich_header())),
    "scaled.fits": scaled,
    "float.fits": lambda: bytes_of(fits.PrimaryHDU(counts(60, 80) - np.float32(30000.5), header_of())),
    "units.fits": lambda: bytes_of(
        fits.PrimaryHDU(header=header_of()),
        fits.ImageHDU(counts(60, 80), name="SCI"),
        fits.BinTableHDU.from_columns([fits.Column("x", "PD()", array=np.array([[1.0], [2.0, 3.0]], dtype=object))]),
    ),
    "packed.fits.gz": lambda: gzip.compress(bytes_of(fits.PrimaryHDU(counts(60, 80), rich_header())), mtime=0),
    "rice.fits.fz": lambda: tiled("RICE_1", counts(60, 80)),
    "gzip.fits.fz": lambda: tiled("GZIP_2", counts(60, 80)),
    "hcompress.fits.fz": lambda: tiled("HCOMPRESS_1", counts(60, 80)),
    "plio.fits.fz": lambda: tiled("PLIO_1", (counts(60, 80) % 50).astype(np.int16)),
    "float.fits.fz": lambda: tiled("RICE_1", counts(60, 80) / np.float32(7)),
}


@pytest.mark.parametrize("form", FORMS)
def test_any_damage_ends_as_a_frame_or_as_a_sentence(tmp_path, form):
    path = tmp_path / form
    path.write_bytes(FORMS[form]())
    done = subprocess.run(
        [sys.executable, "-X", "faulthandler", str(PROGRAM), "1", str(COUNT), str(path)],
        capture_output=True, text=True, timeout=300, check=False,
    )  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
