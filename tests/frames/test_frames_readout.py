"""Overscan, amplifiers, windows: pixels come out where and what they were on the detector."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from frame_files import SETTINGS, header_of, write

from reduce.frames.reader import open_frame
from reduce.frames.readout import overscan_level
from reduce.frames.section import Section, section_of
from reduce.records import FrameError

NY, NX, STRIP = 120, 100, 20
LIGHT = np.random.default_rng(3).poisson(400.0, (NY, NX)).astype(float)


def drift(level: float = 900.0) -> np.ndarray:
    """An offset that wanders by some ADU from line to line."""
    return level + 6.0 * np.sin(np.arange(NY) / 25.0) + 0.05 * np.arange(NY)


def amplifier(light: np.ndarray, offset: np.ndarray, seed: int, *, strip_first: bool = False) -> np.ndarray:
    """(ny, nx + STRIP) raw counts with the overscan at one side."""
    rng = np.random.default_rng(seed)
    strip = np.zeros((len(light), STRIP))
    parts = (strip, light) if strip_first else (light, strip)
    raw = np.hstack(parts) + offset[:, None] + rng.normal(0.0, 3.0, (len(light), light.shape[1] + STRIP))
    return np.rint(raw).astype(np.uint16)


def freed(path: Path) -> np.ndarray:
    frame = open_frame(path, SETTINGS)
    overscan = frame.overscan_rows(0, frame.info.ny)
    assert overscan is not None
    np.testing.assert_array_equal(frame.read_rows(17, 61), frame.read()[17:61])
    np.testing.assert_array_equal(frame.overscan_rows(17, 61), overscan[17:61])
    return frame.read() - overscan


@pytest.mark.parametrize("strip_first", [False, True])
def test_overscan_follows_the_drift_of_the_lines(tmp_path, strip_first):
    raw = amplifier(LIGHT, drift(), 1, strip_first=strip_first)
    data, bias = ("[21:120,1:120]", "[1:20,1:120]") if strip_first else ("[1:100,1:120]", "[101:120,1:120]")
    path = write(tmp_path / "a.fits", raw, TRIMSEC=data, BIASSEC=bias)
    left = freed(path) - LIGHT
    assert left.shape == (NY, NX)
    lines = left.mean(axis=1)  # 3 ADU / √100 of the pixels themselves, and little more of the overscan
    assert abs(lines.mean()) < 0.1
    assert lines.std() < 0.4
    assert np.abs(lines).max() < 1.3
    info = open_frame(path, SETTINGS).info
    assert info.overscan
    assert "overscan was subtracted" in " ".join(info.notes)


def test_overscan_above_gives_a_level_for_each_column(tmp_path):
    offset = 900.0 + 5.0 * np.cos(np.arange(NX) / 30.0)
    raw = np.rint(np.vstack([LIGHT, np.zeros((STRIP, NX))]) + offset).astype(np.uint16)
    path = write(tmp_path / "a.fits", raw, DATASEC="[1:100,1:120]", BIASSEC="[1:100,121:140]")
    assert np.abs(freed(path) - LIGHT).mean() < 0.5


def test_charge_left_behind_in_the_first_columns_and_a_cosmic_ray_do_not_matter(tmp_path):
    raw = amplifier(LIGHT, drift(), 1).astype(float)
    raw[:, NX : NX + 2] += 300.0
    raw[40, NX + 5 : NX + 9] += 20000.0
    path = write(tmp_path / "a.fits", raw.astype(np.uint16), TRIMSEC="[1:100,1:120]", BIASSEC="[101:120,1:120]")
    assert np.abs((freed(path) - LIGHT).mean(axis=1)).max() < 1.2


@pytest.mark.parametrize("overscan", ["[101:120,5:110]", "[90:120,1:120]", "[101:300,1:120]", "none"])
def test_an_overscan_that_gives_no_level_is_only_cut_off(tmp_path, overscan):
    path = write(tmp_path / "a.fits", amplifier(LIGHT, drift(), 1), TRIMSEC="[1:100,1:120]", BIASSEC=overscan)
    frame = open_frame(path, SETTINGS)
    assert not frame.info.overscan
    assert frame.overscan_rows(0, NY) is None
    assert "the rest was cut off" in " ".join(frame.info.notes)


def test_a_steady_drift_is_followed_to_the_ends():
    strip = np.repeat(np.linspace(1000.0, 1050.0, 200)[:, None], 8, axis=1).astype(np.float32)
    level = overscan_level(strip, Section(0, 50, 0, 200))
    np.testing.assert_allclose(level[:, 0], strip[:, 0], atol=1e-3)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("[1:10,5:8]", Section(0, 10, 4, 8)),
        (" [ 10 : 1 , 8 : 5 ] ", Section(0, 10, 4, 8, True, True)),
        ("[0:3,1:2]", None),
        ("[1:3]", None),
        ("", None),
        ("[1:3,1:2", None),
    ],
)
def test_sections(text, expected):
    assert section_of(text) == expected


# ---- amplifiers ------------------------------------------------------------------------------------------

GAINS = (1.4, 1.6, 1.5, 1.7)


def mosaic(path: Path, *, compressed: bool = False, **changes: object) -> np.ndarray:
    """Four amplifiers, each read towards its corner; gives the true electrons of the whole detector."""
    truth = np.random.default_rng(5).poisson(3000.0, (2 * NY, 2 * NX)).astype(float)
    units: list[object] = [fits.PrimaryHDU(header=header_of())]
    for k, gain in enumerate(GAINS):
        right, top = k % 2, k // 2
        part = truth[top * NY : (top + 1) * NY, right * NX : (right + 1) * NX]
        x1, x2 = (right * NX + 1, (right + 1) * NX)
        y1, y2 = (top * NY + 1, (top + 1) * NY)
        if right:
            part, x1, x2 = part[:, ::-1], x2, x1
        if top:
            part, y1, y2 = part[::-1], y2, y1
        raw = amplifier(part / gain, drift(800.0 + 50.0 * k), 10 + k)
        cards = {"DATASEC": "[1:100,1:120]", "BIASSEC": "[101:120,1:120]", "DETSEC": f"[{x1}:{x2},{y1}:{y2}]",
                 "GAIN": gain, "RDNOISE": 4.0 + k, **changes}  # fmt: skip
        header = fits.Header({key: value for key, value in cards.items() if value is not None})
        units.append((fits.CompImageHDU if compressed else fits.ImageHDU)(raw, header, name=f"IM{k + 1}"))
    fits.HDUList(units).writeto(path)
    return truth


@pytest.mark.parametrize("compressed", [False, True])
def test_amplifiers_are_joined_each_with_its_own_gain(tmp_path, compressed):
    truth = mosaic(tmp_path / "a.fits", compressed=compressed)
    frame = open_frame(tmp_path / "a.fits", SETTINGS)
    assert (frame.info.nx, frame.info.ny) == (2 * NX, 2 * NY)
    assert frame.info.gain_e_per_adu == pytest.approx(1.55)
    assert frame.info.read_noise_e == pytest.approx(np.sqrt(np.mean(np.square([4.0, 5.0, 6.0, 7.0]))))
    assert frame.info.window == (0, 0)
    assert "4 amplifiers were joined, each with its own gain" in " ".join(frame.info.notes)
    gain = frame.relative_gain(0, 2 * NY)
    assert gain is not None
    found = freed(tmp_path / "a.fits") * gain * frame.info.gain_e_per_adu
    left = found - truth
    for at in (np.s_[:NY, :NX], np.s_[:NY, NX:], np.s_[NY:, :NX], np.s_[NY:, NX:]):
        assert abs(left[at].mean()) < 0.3
        assert left[at].std() < 6.0  # 3 ADU of read noise and rounding: no pixel came from elsewhere


@pytest.mark.parametrize(
    ("changes", "words"),
    [({"DETSEC": "[1:100,1:120]"}, "do not make one whole detector"), ({"DATASEC": "[1:99,1:120]"}, "do not make one")],
)
def test_amplifiers_that_do_not_fit_are_refused(tmp_path, changes, words):
    mosaic(tmp_path / "a.fits", **changes)
    with pytest.raises(FrameError, match=words):
        open_frame(tmp_path / "a.fits", SETTINGS)


def test_several_detectors_are_refused(tmp_path):
    mosaic(tmp_path / "a.fits")
    with fits.open(tmp_path / "a.fits") as units:
        for k, unit in enumerate(units[1:]):
            unit.header["CCDNAME"] = f"chip {k // 2}"
        units.writeto(tmp_path / "b.fits")
    with pytest.raises(FrameError, match="images of 2 detectors"):
        open_frame(tmp_path / "b.fits", SETTINGS)


@pytest.mark.parametrize(
    ("cards", "window"),
    [
        ({}, None),
        ({"XORGSUBF": 10, "YORGSUBF": 20}, (10, 20)),
        ({"DETSEC": "[201:300,101:220]"}, (200, 100)),
        ({"CCDSEC": "[201:400,101:340]"}, (100, 50)),  # binned 2×2
        ({"DETSEC": "[300:201,101:220]"}, None),  # mirrored
        ({"XORGSUBF": -3, "YORGSUBF": 0}, None),
    ],
)
def test_window(tmp_path, cards, window):
    path = write(tmp_path / "a.fits", np.ones((NY, NX), np.uint16), **cards)
    assert open_frame(path, SETTINGS).info.window == window
