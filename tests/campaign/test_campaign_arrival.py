"""When a frame that has just landed may be taken: soon, but not while its writer fills a size that it reserved."""

from __future__ import annotations

import os
import subprocess
import sys
from io import BytesIO
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from reduce.campaign.intake import RESTED_S, Intake
from reduce.frames.arrival import ends_in_zeros
from reduce.logbook.store import Logbook
from reduce.settings import Settings

NOW_S = 1_800_000_000.0


def frame_bytes(seed: int = 1) -> bytes:
    header = fits.Header({"IMAGETYP": "Light", "DATE-OBS": "2026-12-31T20:00:00", "EXPTIME": 60.0, "FILTER": "V"})
    data = np.random.default_rng(seed).integers(300, 400, (64, 64)).astype(np.uint16)
    buffer = BytesIO()
    fits.PrimaryHDU(data, header).writeto(buffer)
    return buffer.getvalue()


class Clock:
    now_s = NOW_S

    def __call__(self) -> float:
        return self.now_s


@pytest.fixture
def folder(tmp_path):
    place = tmp_path / "frames"
    place.mkdir()
    put(place / "old.fits", frame_bytes(9), NOW_S - 3600)
    return place


@pytest.fixture
def intake(tmp_path, folder):
    with Logbook.create(tmp_path / "campaign") as book:
        made = Intake(book, Settings(), folder, (), tmp_path / "masters")
        assert made.look(str, now_s=Clock())
        yield made


def put(path: Path, content: bytes, at_s: float) -> Path:
    path.write_bytes(content)
    os.utime(path, (at_s, at_s))
    return path


def taken(intake: Intake) -> set[str]:
    return {frame.path.name for frame in intake.known_frames()}


def test_a_whole_frame_is_taken_at_the_second_look(intake, folder):
    clock = Clock()
    put(folder / "a.fits", frame_bytes(), NOW_S)
    assert not intake.look(str, now_s=clock)
    assert intake.waiting == {folder / "a.fits": "it has just landed."}
    clock.now_s += 0.5
    assert intake.look(str, now_s=clock)
    assert taken(intake) == {"old.fits", "a.fits"}
    assert intake.waiting == {}


def test_a_reserved_size_is_waited_for_though_it_looks_the_same(intake, folder):
    clock, whole = Clock(), frame_bytes()
    half = whole[: len(whole) // 2].ljust(len(whole), b"\0")
    put(folder / "a.fits", half, NOW_S)
    for _ in range(6):  # the writer rests, or the file system keeps times to the second
        assert not intake.look(str, now_s=clock)
        clock.now_s += 0.5
    put(folder / "a.fits", whole, clock.now_s)
    assert not intake.look(str, now_s=clock)
    clock.now_s += 0.5
    assert intake.look(str, now_s=clock)
    assert taken(intake) == {"old.fits", "a.fits"}


def test_a_frame_that_really_ends_in_zeros_is_taken_once_it_has_rested(intake, folder):
    clock, whole = Clock(), frame_bytes()
    put(folder / "a.fits", whole[: len(whole) // 2].ljust(len(whole), b"\0"), NOW_S)
    assert not intake.look(str, now_s=clock)
    clock.now_s += RESTED_S
    assert intake.look(str, now_s=clock)


def test_the_last_block_decides(tmp_path):
    assert ends_in_zeros(put(tmp_path / "a", b"x" * 2880 + b"\0" * 2880, 1))
    assert not ends_in_zeros(put(tmp_path / "b", b"x" * 2880 + b"\0" * 2879, 1))
    assert not ends_in_zeros(tmp_path / "gone")


def test_what_measuring_imports_late_is_imported_before_workers_are_forked():
    """Each forked worker would pay for it again: 0.8 s a frame were measured before."""
    code = """
import sys, reduce.campaign.warm
before = set(sys.modules)
import reduce.stars.detect, reduce.field.match, reduce.measure.psf, reduce.measure.aperture, reduce.frames.calibrate
from astropy.io import fits
import scipy.interpolate, scipy.ndimage, scipy.spatial, scipy.stats, erfa
print([name for name in set(sys.modules) - before if name.split(".")[0] in ("scipy", "astropy", "reduce", "erfa")])
"""
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"
