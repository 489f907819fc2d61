"""Filter names as they are written on wheels, and the band behind each."""

from __future__ import annotations

from pathlib import Path

import pytest

from reduce.frames.band import band_from_name
from reduce.frames.dialect import built_in_dialect, understand
from reduce.frames.header import Header
from reduce.settings import Settings

NAMES = [
    ("B", "B"), ("V", "V"), ("R", "R"), ("I", "I"), ("g", "g"), ("r", "r"), ("i", "i"),
    ("Bessell V", "V"), ("Bessell-B", "B"), ("V Bessell", "V"), ("bessel r", "R"), ("Johnson V", "V"),
    ("JohnsonV", "V"),
     ("Johnson-Cousins R", "R"), ("Cousins I", "I"), ("R (Cousins)", "R"), ("I_Cousins", "I"), ("Rc", "R"), ("Ic", "I"),
    ("R_c", None), ("Johnson v", "V"), ("Kron-Cousins R", "R"), ("Harris B", "B"), ("V band", "V"), ("Filter V", "V"),
    ("V filter", "V"), ("2: V", "V"), ("#3 Rc", "R"), ("V-band (Bessell)", "V"),
    ("g'", "g"), ("r'", "r"), ("i'", "i"), ("gp", "g"), ("rp", "r"), ("ip", "i"), ("r prime", "r"), ("SDSS g", "g"),
    ("SDSS r'", "r"), ("SDSS-R", "r"), ("sdssi", "i"), ("sloan_g", "g"), ("Sloan R", "r"), ("g_SDSS", "g"),
    ("V+Clear", "V"), ("B,Clear", "B"), ("air, R", "R"), ("BESS-V", "V"),
    ("SDSS g' (2)", "g"), ("r'2", "r"), ("SG", "g"), ("PS1 i", "i"),
    # ambiguous or not of a standard system
    ("Red", None), ("Green", None), ("Blue", None), ("G", None), ("L", None), ("Lum", None), ("Clear", None),
    ("Ha", None), ("H-alpha", None), ("OIII", None), ("b", None), ("v", None), ("u", None), ("U", None), ("z", None),
    ("SDSS u", None), ("sloan z'", None), ("Johnson U", None), ("SDSS V", None), ("Johnson g", None), ("TB", None),
    ("BV", None), ("B V", None), ("Sloan/Johnson R", None), ("Y", None), ("", None), ("1", None),
]  # fmt: skip


@pytest.mark.parametrize(("name", "band"), NAMES)
def test_band_from_name(name, band):
    assert band_from_name(name, built_in_dialect().bands) == band


def info_of(cards, filters=None):
    cards = {"IMAGETYP": "light", "EXPTIME": 1.0, "MJD-OBS": 60000.25, **cards}
    return understand(Header(cards), (10, 10), Path("a.fits"), Settings(filters=filters or {}))


def test_the_observers_own_names_come_first():
    assert info_of({"FILTER": "V"}, {"V": "g"}).band == "g"
    assert info_of({"FILTER": "Slot 3"}, {"Slot 3": "V"}).band == "V"


@pytest.mark.parametrize(
    ("cards", "name", "band", "note"),
    [
        ({"FILTER1": "air", "FILTER2": "Bessell V"}, "Bessell V", "V", ""),
        ({"FILT1": "air", "FILT2": "V"}, "V", "V", ""),
        ({"FILTER1": "clear", "FILTER2": "open"}, "", None, "names no filter"),
        ({"FILTER": "Clear", "FILTER1": "B"}, "B", "B", ""),
        ({"FILTER1": "B", "FILTER2": "V"}, "B + V", None, "two filters"),
        ({"FILTER": "Clear"}, "Clear", None, "no filter was in the beam"),
        ({"FILTER": "Lum"}, "Lum", None, "[filters]"),
        ({"FILTER": "Johnson R"}, "Johnson R", "R", "Cousins R"),
        ({}, "", None, "names no filter"),
        ({"FILTER": 3}, "3", None, "[filters]"),
    ],
)
def test_what_is_said_of_a_filter(cards, name, band, note):
    info = info_of(cards)
    assert (info.filter_name, info.band) == (name, band)
    assert (note in " ".join(info.notes)) if note else not info.notes


def test_bias_and_dark_need_no_filter():
    assert info_of({"IMAGETYP": "bias"}).notes == ()
    assert info_of({"IMAGETYP": "dark", "FILTER": "V"}).band is None
