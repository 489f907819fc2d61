"""Small FITS files for tests of the frames room."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
from astropy.io import fits

from reduce.settings import Camera, Settings

SETTINGS = Settings(camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535))
CARDS = {
    "IMAGETYP": "Light Frame",
    "DATE-OBS": "2024-03-10T23:59:50",
    "EXPTIME": 60.0,
    "FILTER": "V",
    "INSTRUME": "cam",
}


def counts(ny: int = 30, nx: int = 40, seed: int = 1) -> np.ndarray:
    """Whole numbers of a 16-bit camera, some above 32767."""
    return np.random.default_rng(seed).integers(900, 65535, (ny, nx)).astype(np.uint16)


def header_of(**cards: object) -> fits.Header:
    return fits.Header({**CARDS, **cards})


def write(path: Path, data: np.ndarray | None, **cards: object) -> Path:
    """A single-image file; an existing one is replaced."""
    path.parent.mkdir(parents=True, exist_ok=True)
    fits.PrimaryHDU(data, header_of(**cards)).writeto(path, overwrite=True)
    return path


def bytes_of(*units: object) -> bytes:
    buffer = io.BytesIO()
    fits.HDUList(list(units)).writeto(buffer)  # type: ignore[arg-type]
    return buffer.getvalue()


def write_gzip(path: Path, content: bytes) -> Path:
    path.write_bytes(gzip.compress(content, mtime=0))
    return path


def raw_header(*cards: str) -> bytes:
    """A header block as written by hand, right or wrong."""
    text = "".join(card.ljust(80) for card in (*cards, "END"))
    return text.ljust(-(-len(text) // 2880) * 2880).encode("latin-1")
