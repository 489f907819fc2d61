"""Frames that were calibrated before they came: told by words, units or numbers, and not calibrated twice."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from frame_files import SETTINGS, counts, header_of, write

from reduce.frames.calibrate import calibrate
from reduce.frames.dialect import understand
from reduce.frames.header import Header
from reduce.frames.inspection import inspect_file
from reduce.frames.master_sets import ChosenMasters
from reduce.frames.reader import open_frame
from reduce.frames.treated import STEPS, without_done
from reduce.settings import Settings

GOOD = {"IMAGETYP": "Light Frame", "DATE-OBS": "2024-03-10T23:59:50", "EXPTIME": 60.0, "FILTER": "V"}

SPELLINGS = [
    ({"CALSTAT": "BDF"}, (), STEPS),
    ({"CALSTAT": "D"}, (), ("dark",)),
    ({"CALSTAT": "B, D"}, (), ("bias", "dark")),
    ({"CALSTAT": ""}, (), ()),
    ({"CALSTAT": "not yet begun"}, (), ()),
    ({"ZEROCOR": "Mar 11 9:12 Zero level correction image is Zero.fits"}, (), ("bias",)),
    ({"FLATCOR": "Mar 11 9:12 Flat field image is FlatV.fits with scale=21000."}, (), STEPS),
    ({"BIASCORR": "COMPLETE", "DARKCORR": "COMPLETE", "FLATCORR": "OMIT"}, (), ("bias", "dark")),
    ({"BIASCORR": "PERFORM", "DARKCORR": "PERFORM", "FLATCORR": "PERFORM"}, (), ()),
    ({"BIASSUB": True, "DARKSUB": True, "FLATDIV": False}, (), ("bias", "dark")),
    ({"FLATDIV": 1}, (), STEPS),
    ({"FLATDIV": 0, "BIASSUB": 0}, (), ()),
    ({"FLATCOR": "F"}, (), ()),
    ({}, ("Bias frame subtracted: master_bias.fits", "dark subtracted"), ("bias", "dark")),
    ({}, ("Divided by the master flat in V",), STEPS),
    ({}, ("flat-fielded with flat_V.fits",), STEPS),
    ({}, ("This frame was not flat fielded.", "bias to be subtracted later"), ()),
    ({}, ("flat field lamp was on before the night", "the dark slide sticks"), ()),
    ({"BUNIT": "adu"}, (), ()),
    ({"BUNIT": "DATA VALUE"}, (), ()),
]


def read(cards: dict, history: tuple[str, ...] = (), name: str = "a.fits", settings: Settings | None = None):
    return understand(Header(cards, {}, history), (100, 200), Path(name), settings or Settings())


@pytest.mark.parametrize(("cards", "history", "steps"), SPELLINGS)
def test_what_a_header_says_of_earlier_steps(cards, history, steps):
    info = read({**GOOD, **cards}, history)
    assert info.calibrated == steps
    assert info.kind == "light"
    assert any("not done again" in note for note in info.notes) == bool(steps)


@pytest.mark.parametrize("kind", ["Bias", "Dark", "Flat"])
def test_a_calibrated_calibration_frame_makes_no_master(kind):
    info = read({**GOOD, "IMAGETYP": kind, "CALSTAT": "B"})
    assert info.kind == "unknown"
    assert "not used to make a master" in info.notes[-1]


@pytest.mark.parametrize("unit", ["Jy/beam", "10**-17 erg/(s cm2 Angstrom)", "nanomaggy", "mag"])
def test_pixels_that_are_no_counts_are_not_used(unit):
    info = read({**GOOD, "BUNIT": unit})
    assert info.kind == "unknown"
    assert "no noise can be worked out" in " ".join(info.notes)


@pytest.mark.parametrize(
    ("unit", "adu"),
    [
        ("electron", 1 / 1.5), ("e-", 1 / 1.5), ("electrons/s", 60 / 1.5), ("electron s-1", 60 / 1.5),
        ("e-/sec", 60 / 1.5), ("adu / s", 60.0), ("count per second", 60.0), ("counts", 1.0), ("ADU/pixel", 1.0),
    ],
)  # fmt: skip
def test_other_units_are_turned_back_into_counts(tmp_path, unit, adu):
    data = (counts() / np.float32(7)).astype(np.float32)
    frame = open_frame(write(tmp_path / "a.fits", data, BUNIT=unit), SETTINGS)  # gain 1.5 e-/ADU, 60 s
    np.testing.assert_allclose(frame.read(), data * adu, rtol=1e-6)
    np.testing.assert_allclose(frame.read_rows(3, 9), data[3:9] * adu, rtol=1e-6)
    assert frame.info.calibrated == (() if adu == 1.0 else STEPS)


def test_electrons_without_a_known_gain_have_gain_one(tmp_path):
    path = write(tmp_path / "a.fits", counts(), BUNIT="electron")
    frame = open_frame(path, Settings())
    assert frame.info.gain_e_per_adu == 1.0
    np.testing.assert_array_equal(frame.read(), counts().astype(np.float32))


def noisy(sky: float, dtype: type) -> np.ndarray:
    return np.random.default_rng(3).normal(sky, 10.0, (80, 100)).astype(dtype)


@pytest.mark.parametrize(
    ("sky", "dtype", "steps"),
    [
        (0.0, np.float32, STEPS), (15.0, np.float64, STEPS),
        (300.0, np.float32, ()),  # fractional numbers above zero: an average of raw counts has them too
        (0.0, np.int16, ()),  # whole numbers below zero: a camera that writes its 16 bits without their offset
    ],
)  # fmt: skip
def test_fractional_numbers_below_zero_are_no_raw_counts(tmp_path, sky, dtype, steps):
    info = open_frame(write(tmp_path / "a.fits", noisy(sky, dtype)), SETTINGS).info
    assert info.calibrated == steps
    assert any("below zero" in note for note in info.notes) == bool(steps)


def test_tile_compressed_fractions_are_looked_at_too(tmp_path):
    path = tmp_path / "a.fits.fz"
    unit = fits.CompImageHDU(noisy(0.0, np.float32), header_of(), compression_type="RICE_1")
    fits.HDUList([fits.PrimaryHDU(), unit]).writeto(path)
    assert open_frame(path, SETTINGS).info.calibrated == STEPS


def test_masters_of_done_steps_are_left_out():
    chosen = ChosenMasters("bias", "dark", "flat", ("a note.",))  # type: ignore[arg-type]
    assert without_done(read(GOOD), chosen) is chosen
    assert without_done(read({**GOOD, "CALSTAT": "D"}), chosen) == ChosenMasters(flat="flat")  # type: ignore[arg-type]
    assert without_done(read({**GOOD, "CALSTAT": "BDF"}), chosen) == ChosenMasters()


def test_a_calibrated_frame_goes_through_calibration_unchanged(tmp_path):
    data = noisy(0.0, np.float32)
    frame = open_frame(write(tmp_path / "a.fits", data, BUNIT="electron"), SETTINGS)
    image = calibrate(frame.read(), frame.info, without_done(frame.info, ChosenMasters()), SETTINGS)
    np.testing.assert_allclose(image.data_e, data, rtol=1e-5)
    assert image.flat_used
    assert not any("neither bias nor dark" in note for note in image.notes)


def test_inspect_tells(tmp_path):
    found = inspect_file(write(tmp_path / "a.fits", counts(), CALSTAT="BDF"), SETTINGS)
    assert found["calibrated"] == list(STEPS)
    assert "calibrated before it came here (bias by keyword CALSTAT" in found["notes"][0]


# ---- kinds by pattern ------------------------------------------------------------------------------------


def stated(**patterns: tuple[str, ...]) -> Settings:
    return Settings.model_validate({"frames": patterns})


@pytest.mark.parametrize(
    ("name", "patterns", "kind"),
    [
        ("/data/night/Flats/a001.fits", {"flat": ("flats/*",)}, "flat"),
        ("/data/flats/2024-03-10/a001.fits", {"flat": ("flats/*",)}, "flat"),
        ("/data/night/X_FLAT_001.FIT", {"flat": ("*_flat_*",)}, "flat"),
        ("/data/my_dark_sky/a001.fits", {"dark": ("*dark*",)}, "light"),  # a pattern without a stroke is of names
        ("/data/cal/a001.fits", {"dark": ("cal/*",), "bias": ("cal/*",)}, "light"),  # contradicts itself
        ("/data/night/bias/dark1.fits", {"light": ("night/*",)}, "light"),  # before our own guess by the name
    ],
)
def test_a_pattern_states_the_kind_where_the_header_does_not(name, patterns, kind):
    cards = {key: value for key, value in GOOD.items() if key != "IMAGETYP"}
    info = read(cards, name=name, settings=stated(**patterns))
    assert info.kind == kind
    assert any("[frames] in observatory.toml" in note for note in info.notes) == (
        kind != "light" or "light" in patterns
    )
    assert read({**cards, "IMAGETYP": "Light"}, name=name, settings=stated(**patterns)).kind == "light"
