"""Headers as cameras write them, one a row: what must be understood, and what must be refused."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.frames.dialect import built_in_dialect, understand
from reduce.frames.header import Header
from reduce.frames.position import sexagesimal
from reduce.records import BANDS, FrameInfo
from reduce.settings import Camera, Settings

GOOD = {"IMAGETYP": "Light Frame", "DATE-OBS": "2024-03-10T23:59:50", "EXPTIME": 60.0, "FILTER": "V"}
MID = 60380.0002315


def read(
    cards: dict, comments: dict | None = None, name: str = "a.fits", settings: Settings | None = None
) -> FrameInfo:
    return understand(Header(cards, comments or {}), (100, 200), Path(name), settings or Settings())


def test_a_plain_header_needs_no_note():
    info = read(GOOD)
    assert (info.kind, info.band, info.filter_name, info.exposure_s, info.nx, info.ny) == (
        "light",
        "V",
        "V",
        60.0,
        200,
        100,
    )
    assert info.mjd_mid == pytest.approx(MID, abs=1e-7)
    assert info.notes == ()
    unknown = (info.ra_deg, info.dec_deg, info.scale_arcsec, info.gain_e_per_adu, info.read_noise_e, info.temperature_c)
    assert unknown == (None,) * 6


# ---- time ------------------------------------------------------------------------------------------------

TIMES = [
    ({"DATE-OBS": "2024-03-10T23:59:50"}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-10T23:59:50.000Z"}, {}, MID, "ends in Z"),
    ({"DATE-OBS": "2024-03-10 23:59:50"}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-10", "TIME-OBS": "23:59:50"}, {}, MID, "taken from TIME-OBS"),
    ({"DATE-OBS": "2024-03-10", "UT": "23:59:50.0"}, {}, MID, "taken from UT"),
    ({"DATE-OBS": "2024-03-10", "UTSTART": "23:59:50"}, {}, MID, "taken from UTSTART"),
    ({"DATE-OBS": "2024-03-10T00:00:00", "UT": "23:59:50"}, {}, MID, "says midnight"),
    ({"DATE-OBS": "2024-03-11T00:00:00", "UT": "00:00:00", "XPOSURE": 40.0}, {}, MID, ""),
    ({"JD-MID": 2460380.5002315}, {}, MID, ""),
    ({"DATE-OBS": "2024/03/10", "UT": "23:59:50"}, {}, MID, "strokes"),
    ({"DATE-OBS": "10/03/98", "UT": "23:59:50"}, {}, 50883.0002315, "DD/MM/YY"),
    ({"DATE-BEG": "2024-03-10T23:59:50", "DATE-OBS": "2024-03-10T23:59:55"}, {}, MID, ""),
    ({"DATE-AVG": "2024-03-11T00:00:20", "DATE-OBS": "2024-03-10T23:59:40"}, {}, MID, ""),
    ({"MJD-AVG": MID, "DATE-OBS": "2024-03-10T23:59:40"}, {}, MID, ""),
    ({"MJD-OBS": 60379.99988426}, {}, MID, ""),
    ({"MJD-OBS": "60379.99988426"}, {}, MID, ""),
    ({"JD": 2460380.49988426}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-11T00:00:20"}, {"DATE-OBS": "UTC mid exposure"}, MID, "middle of the exposure"),
    ({"DATE-OBS": "2024-03-11T00:00:50"}, {"DATE-OBS": "UTC at end of exposure"}, MID, "end of the exposure"),
    ({"DATE-OBS": "2024-03-10T23:59:50"}, {"DATE-OBS": "UTC start, not local time"}, MID, ""),
    ({"DATE-OBS": "2024-03-11T00:00:27", "TIMESYS": "TAI"}, {}, MID, "from TAI to UTC (-37.000 s)"),
    ({"DATE-OBS": "2024-03-11T00:00:59.184", "TIMESYS": "TT"}, {}, MID, "from TT to UTC (-69.184 s)"),
    ({"DATE-OBS": "2024-03-11T00:00:08", "TIMESYS": "GPS"}, {}, MID, "from GPS to UTC (-18.000 s)"),
    ({"DATE-OBS": "2024-03-10T23:59:50", "TIMESYS": "UT1"}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-10T23:59:50", "JD": 2460380.499884}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-10T23:59:50", "MJD": 60379, "JD": 2460380.0}, {}, MID, ""),
    ({"DATE-OBS": "2024-03-10T23:59:50"}, {"DATE-OBS": "UTC, seconds from midnight"}, MID, ""),
    # local time in one keyword, UTC in another: the UTC one is used
    ({"DATE-OBS": "2024-03-10T16:59:50", "MJD-OBS": 60379.99988426}, {"DATE-OBS": "local time"}, MID, "local time"),
]  # fmt: skip


@pytest.mark.parametrize(("cards", "comments", "mjd", "note"), TIMES)
def test_times_that_are_understood(cards, comments, mjd, note):
    info = read({"IMAGETYP": "light", "FILTER": "V", "EXPTIME": 60.0, **cards}, comments)
    assert info.mjd_mid == pytest.approx(mjd, abs=2e-7)
    assert (note in " ".join(info.notes)) if note else not info.notes


REFUSED = [
    ({"DATE-OBS": "2024-03-10T16:59:50"}, {"DATE-OBS": "local time"}, "local time"),
    ({"DATE-OBS": "2024-03-10T16:59:50"}, {"DATE-OBS": "Local start of exposure"}, "local time"),
    ({"DATE-OBS": "2024-03-10", "UT": "16:59:50"}, {"UT": "[LT] local clock"}, "no time of day"),
    ({"DATE-OBS": "2024-03-10T23:59:50+02:00"}, {}, "time zone"),
    ({"DATE-OBS": "2024-03-10T23:59:50 CET"}, {}, "time zone"),
    ({"DATE-OBS": "2024-03-10T23:59:50", "TIMESYS": "LOCAL"}, {}, "LOCAL"),
    ({"DATE-OBS": "2024-03-10T23:59:50", "TIMESYS": "MST"}, {}, "MST"),
    ({"DATE-OBS": "2024-03-10T16:59:50", "MJD-OBS": 60379.99988426}, {}, "7.00 hours apart"),
    ({"DATE-OBS": "2024-03-10"}, {}, "no time of day"),
    ({"DATE-OBS": "2024-03-10T25:59:50"}, {}, "no time of day that can be read"),
    ({"DATE-OBS": "2024-02-30T23:59:50"}, {}, "not a date"),
    ({"DATE-OBS": "03/10/2024", "UT": "23:59:50"}, {}, "not a date"),
    ({"DATE-OBS": "10/03/24", "UT": "23:59:50"}, {}, "not a date"),
    ({"DATE-OBS": "yesterday"}, {}, "not a date"),
    ({"DATE-OBS": "0001-01-01T00:00:00"}, {}, "camera's clock"),
    ({"MJD-OBS": 0.5}, {}, "camera's clock"),
    ({"MJD-OBS": 0.0}, {}, "no time of observation"),
    ({"LOCTIME": "2024-03-10T16:59:50"}, {}, "no time of observation"),
    ({}, {}, "no time of observation"),
]


@pytest.mark.parametrize(("cards", "comments", "note"), REFUSED)
def test_times_that_are_refused_and_not_guessed(cards, comments, note):
    info = read({"IMAGETYP": "light", "FILTER": "V", "EXPTIME": 60.0, **cards}, comments)
    assert info.mjd_mid is None
    assert note in info.notes[-1]
    assert info.notes[-1].endswith(".")


def test_a_begin_without_a_length_has_no_middle():
    info = read({"IMAGETYP": "light", "FILTER": "V", "DATE-OBS": "2024-03-10T23:59:50"})
    assert info.mjd_mid is None
    assert "not its length" in info.notes[-1]


# ---- position --------------------------------------------------------------------------------------------

WCS = {"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CRVAL1": 188.7, "CRVAL2": -0.51}
POSITIONS = [
    ({"RA": "12 34 56.7", "DEC": "-00 30 15"}, {}, 188.73625, -0.504167, ""),
    ({"RA": "12:34:56.7", "DEC": "-0:30:15.0"}, {}, 188.73625, -0.504167, ""),
    ({"RA": "12h34m56.7s", "DEC": "+05d30m15s"}, {}, 188.73625, 5.504167, ""),
    ({"OBJCTRA": "12 34 57", "OBJCTDEC": "+05 30 15"}, {}, 188.7375, 5.504167, ""),
    ({"RA": "188:44:11", "DEC": "05:30:15"}, {}, 188.736389, 5.504167, "read as degrees"),
    ({"RA": 188.73625, "DEC": -0.504}, {}, 188.73625, -0.504, ""),
    ({"RA": "188.73625", "DEC": "-0.504"}, {}, 188.73625, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504}, {"RA": "[hours] right ascension"}, 188.736, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504}, {"RA": "RA (h) of the telescope"}, 188.736, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504}, {"RA": "degrees"}, 12.5824, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504, "OBJCTRA": "12 34 57", "OBJCTDEC": "-00 30 14"}, {}, 188.736, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504, "OBJCTRA": "00 50 20", "OBJCTDEC": "-00 30 14"}, {}, 12.5824, -0.504, ""),
    ({"RA": 12.5824, "DEC": -0.504, **WCS}, {}, 188.736, -0.504, ""),
    ({"RA_DEG": 12.5824, "DEC_DEG": -0.504}, {}, 12.5824, -0.504, ""),
    ({"RA": "", "DEC": "", "OBJCTRA": "12 34 57", "OBJCTDEC": "+05 30 15"}, {}, 188.7375, 5.504167, ""),
    (WCS, {}, 188.7, -0.51, ""),
    ({"RA": "bogus", "DEC": "nonsense"}, {}, None, None, ""),
    ({"RA": "12 34 56", "DEC": "95 00 00"}, {}, None, None, ""),
    ({"RA": 12.5824, "DEC": -0.504}, {}, None, None, "hours or degrees"),
]  # fmt: skip


@pytest.mark.parametrize(("cards", "comments", "ra_deg", "dec_deg", "note"), POSITIONS)
def test_positions(cards, comments, ra_deg, dec_deg, note):
    info = read({**GOOD, **cards}, comments)
    assert info.ra_deg == (pytest.approx(ra_deg, abs=1e-5) if ra_deg is not None else None)
    assert info.dec_deg == (pytest.approx(dec_deg, abs=1e-5) if dec_deg is not None else None)
    assert (note in " ".join(info.notes)) if note else not info.notes


def test_a_position_of_another_equinox_is_precessed():
    from astropy import units as u
    from astropy.coordinates import FK5, SkyCoord

    info = read({**GOOD, "RA": "12 34 56.7", "DEC": "+45 30 15", "EQUINOX": 2024.5})
    theirs = SkyCoord(188.73625 * u.deg, 45.504167 * u.deg, frame=FK5(equinox="J2024.5")).transform_to(
        FK5(equinox="J2000")
    )
    assert info.ra_deg == pytest.approx(theirs.ra.deg, abs=2e-5)
    assert info.dec_deg == pytest.approx(theirs.dec.deg, abs=2e-5)
    assert "equinox 2024.5" in info.notes[0]


@given(value=st.floats(-89.99, 89.99))
def test_sexagesimal_keeps_the_sign(value):
    total = round(abs(value) * 360000)
    text = f"{'-' if value < 0 else '+'}{total // 360000:02d}:{total // 6000 % 60:02d}:{total % 6000 / 100:05.2f}"
    assert sexagesimal(text) == pytest.approx(value, abs=1.0 / 360000)


# ---- kind ------------------------------------------------------------------------------------------------

KINDS = [
    ("Light Frame", "light"), ("LIGHT", "light"), ("object", "light"), ("Science", "light"), ("Bias Frame", "bias"),
    ("zero", "bias"), ("BIAS", "bias"), ("Dark Frame", "dark"), ("dark", "dark"), ("Flat Field", "flat"),
    ("Flat Frame", "flat"), ("SKYFLAT", "flat"), ("dome flat", "flat"), ("FLAT,SKY", "flat"), ("twilight", "flat"),
    ("Dark Flat", "dark"), ("Master Bias", "unknown"), ("focus", "unknown"), ("Light Frame ", "light"),
    ("auto flat 3", "flat"),
]  # fmt: skip


@pytest.mark.parametrize(("word", "kind"), KINDS)
@pytest.mark.parametrize("keyword", ["IMAGETYP", "OBSTYPE", "FRAME"])
def test_kinds(keyword, word, kind):
    cards = {key: value for key, value in GOOD.items() if key != "IMAGETYP"}
    assert read({**cards, keyword: word}).kind == kind


@pytest.mark.parametrize(
    ("cards", "name", "kind"),
    [
        ({"OBJECT": "bias"}, "a.fits", "bias"),
        ({"OBJECT": "Sky Flat"}, "a.fits", "flat"),
        ({}, "dark_120s_003.fits", "dark"),
        ({}, "Flat-V-001.fit", "flat"),
        ({}, "masterFlat.fits", "flat"),
        ({"EXPTIME": 0.0}, "0001.fits", "bias"),
        ({}, "darkstar-001.fits", "light"),
        ({"OBJECT": "Flatiron field"}, "x.fits", "light"),
        ({"OBJECT": "flat V"}, "x.fits", "flat"),
        ({"OBJECT": "skyflat_V_1"}, "x.fits", "flat"),
        ({"OBJECT": "dark 60 s"}, "x.fits", "dark"),
        ({"OBJECT": "Dark River"}, "x.fits", "light"),
    ],
)
def test_kind_by_other_hints_is_noted(cards, name, kind):
    info = read({**{key: value for key, value in GOOD.items() if key != "IMAGETYP"}, **cards}, name=name)
    assert info.kind == kind
    assert any("does not say" in note for note in info.notes)


def test_the_stated_kind_wins_over_a_name():
    assert read({**GOOD, "OBJECT": "dark"}, name="bias-1.fits").kind == "light"


# ---- numbers ---------------------------------------------------------------------------------------------

NUMBERS = [
    ({"EXPOSURE": 30}, {}, "exposure_s", 30.0),
    ({"XPOSURE": 29.9, "EXPTIME": 30.0}, {}, "exposure_s", 29.9),
    ({"EXPTIME": "30.0 s"}, {}, "exposure_s", 30.0),
    ({"EXPTIME": 30000}, {"EXPTIME": "[ms] exposure"}, "exposure_s", 30.0),
    ({"EXPTIME": 30000000}, {"EXPTIME": "exposure in microseconds"}, "exposure_s", 30.0),
    ({"EXPTIME": 0.5}, {"EXPTIME": "Exposure time in minutes"}, "exposure_s", 30.0),
    ({"EXPTIME": -1}, {}, "exposure_s", None),
    ({"EXPTIME": True}, {}, "exposure_s", None),
    ({"EXPTIME": "1e999"}, {}, "exposure_s", None),
    ({"GAIN": 1.4}, {}, "gain_e_per_adu", 1.4),
    ({"GAIN": "1.4"}, {}, "gain_e_per_adu", 1.4),
    ({"EGAIN": 0.78, "GAIN": 139}, {}, "gain_e_per_adu", 0.78),
    ({"GAIN": 139}, {}, "gain_e_per_adu", None),
    ({"GAIN": 0}, {}, "gain_e_per_adu", None),
    ({"GAIN": 0.5}, {"GAIN": "ADU/e-"}, "gain_e_per_adu", 2.0),
    ({"GAIN": 0.5}, {"GAIN": "DN per electron"}, "gain_e_per_adu", 2.0),
    ({"GAIN": 10}, {"GAIN": "camera gain setting"}, "gain_e_per_adu", None),
    ({"GAIN": 12.0}, {"GAIN": "[dB]"}, "gain_e_per_adu", None),
    ({"GAIN": 20}, {"GAIN": "in 0.1dB"}, "gain_e_per_adu", None),
    ({"RDNOISE": 8.5}, {}, "read_noise_e", 8.5),
    ({"READNOIS": 5.0, "GAIN": 2.0}, {"READNOIS": "[ADU] rms"}, "read_noise_e", 10.0),
    ({"READNOIS": 5.0}, {"READNOIS": "[ADU] rms"}, "read_noise_e", None),
    ({"SATURATE": 60000}, {}, "saturation_adu", 60000.0),
    ({"CCD-TEMP": -20.1}, {}, "temperature_c", -20.1),
    ({"DET-TEMP": 253.15}, {}, "temperature_c", -20.0),
    ({"SET-TEMP": -25, "CCD-TEMP": -24.8}, {}, "temperature_c", -24.8),
    ({"SECPIX": 0.63}, {}, "scale_arcsec", 0.63),
    ({"PIXSCALE": "0.63"}, {}, "scale_arcsec", 0.63),
    ({"CTYPE1": "RA---TAN", "CDELT1": -2.0e-4, "CDELT2": 2.0e-4}, {}, "scale_arcsec", 0.72),
    ({"CTYPE1": "RA---TAN", "CD1_1": 0.0, "CD1_2": 2e-4, "CD2_1": 2e-4, "CD2_2": 0.0}, {}, "scale_arcsec", 0.72),
    ({"CTYPE1": "LINEAR", "CDELT1": 1.0, "CDELT2": 1.0}, {}, "scale_arcsec", None),
    ({"XPIXSZ": 9.0, "FOCALLEN": 2000.0}, {}, "scale_arcsec", 0.928191),
    ({"XPIXSZ": 9.0, "FOCALLEN": 2.0}, {}, "scale_arcsec", None),
    ({"CTYPE1": "RA---TAN", "CD1_2": 2e-4, "CD2_1": 2e-4}, {}, "scale_arcsec", 0.72),
    ({"CTYPE1": "RA---TAN", "CD1_1": 1.0, "CD2_2": 1.0, "SECPIX": 0.63}, {}, "scale_arcsec", 0.63),
    ({"XPIXSZ": 9.0}, {}, "scale_arcsec", None),
    ({"XBINNING": 2, "YBINNING": 2}, {}, "binning", (2, 2)),
    ({"XBINNING": 3}, {}, "binning", (3, 3)),
    ({"CCDSUM": "2 2"}, {}, "binning", (2, 2)),
    ({"BINNING": "2x1"}, {}, "binning", (2, 1)),
    ({"BINNING": "none"}, {}, "binning", (1, 1)),
    ({"INSTRUME": "Camera 1"}, {}, "camera", "Camera 1"),
    ({"OBJECT": "Field 7"}, {}, "object_name", "Field 7"),
]  # fmt: skip


@pytest.mark.parametrize(("cards", "comments", "name", "value"), NUMBERS)
def test_numbers(cards, comments, name, value):
    base = {key: card for key, card in GOOD.items() if key != "EXPTIME" or "exposure" not in name}
    found = getattr(read({**base, **cards}, comments), name)
    assert found == (pytest.approx(value, rel=1e-6) if isinstance(value, float) else value)


def test_a_coloured_sensor_is_said():
    assert "mosaic" in " ".join(read({**GOOD, "BAYERPAT": "RGGB"}).notes)


def test_the_camera_of_the_settings_names_a_silent_header():
    assert read(GOOD, settings=Settings(camera=Camera(name="own"))).camera == "own"


# ---- hostile text ----------------------------------------------------------------------------------------


def test_escape_codes_do_not_pass():
    info = read({**GOOD, "OBJECT": "\x1b[2J\x1b]0;title\x07boo", "INSTRUME": "c\u202eam", "FILTER": "V\x1b[31m"})
    for text in (info.object_name, info.camera, info.filter_name, *info.notes):
        assert text.isprintable(), text


TEXT = st.text(max_size=70)
VALUE = st.one_of(TEXT, st.integers(), st.floats(), st.booleans(), st.none())
WORDS = [
    *sorted({word for words in built_in_dialect().keywords.values() for word in words}),
    "DATE-OBS", "TIME-OBS", "UT", "TIMESYS", "MJD-OBS", "JD", "RA", "DEC", "OBJCTRA", "OBJCTDEC", "CTYPE1", "CDELT1",
]  # fmt: skip


@given(
    cards=st.dictionaries(st.sampled_from(WORDS), VALUE, max_size=12),
    comments=st.dictionaries(st.sampled_from(WORDS), TEXT, max_size=4),
)
def test_no_header_breaks_it_and_all_text_is_printable(cards, comments):
    info = read(cards, comments, name="x.fits")
    for text in (info.filter_name, info.object_name, info.camera, *info.notes):
        assert all(character.isprintable() or character == " " for character in text)
    assert info.band is None or info.band in BANDS
    assert info.ra_deg is None or 0 <= info.ra_deg < 360
    assert info.exposure_s is None or info.exposure_s >= 0
