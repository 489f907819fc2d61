"""What a header means: the words of ``config/dialects.toml`` and the rules for the cases that words cannot decide.

Whatever is guessed, converted or ignored leaves a sentence in ``FrameInfo.notes``; what cannot be known is None.
"""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from fnmatch import fnmatchcase
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from reduce.frames.band import band_of
from reduce.frames.header import Header
from reduce.frames.observed_time import mid_time
from reduce.frames.position import position
from reduce.frames.treated import earlier_steps, pixel_unit
from reduce.plain_text import clean_text
from reduce.records import FrameInfo, FrameKind
from reduce.settings import Frames, Settings

ARCSEC_PER_RADIAN_MM_PER_UM = 206.264806
"""Arcsec subtended by 1 µm at 1 mm."""
LARGEST_GAIN = 25.0
"""e-/ADU; a larger number under a gain keyword is a setting of the camera (common practice)."""
SCALE_RANGE_ARCSEC = (0.02, 200.0)
"""Arcsec a pixel; a scale outside is in another unit or a slip."""
EXPOSURE_UNITS = (
    (r"\[ms\]|millisec|\bms\b", 1e-3, "milliseconds"),
    (r"\[[uµ]s\]|microsec|\b[uµ]s\b", 1e-6, "microseconds"),
    (r"\[min\]|\bminutes?\b", 60.0, "minutes"),
)
"""What the comment of an exposure may say instead of seconds: pattern, seconds, name."""


@dataclass(frozen=True, slots=True)
class Dialect:
    """The table of words."""

    keywords: Mapping[str, list[str]]
    positions: list[Mapping[str, str]]
    time: Mapping[str, list[str]]
    kinds: Mapping[str, list[str]]
    bands: Mapping[str, Any]
    calibrated: Mapping[str, list[str]]


@lru_cache(maxsize=1)
def built_in_dialect() -> Dialect:
    """The table that comes with the program."""
    text = (files("reduce") / "_config" / "dialects.toml").read_text(encoding="utf-8")
    return Dialect(**tomllib.loads(text))


def understand(
    header: Header,
    shape: tuple[int, int],
    path: Path,
    settings: Settings,
    dialect: Dialect | None = None,
    extension: int = 0,
    notes: tuple[str, ...] = (),
) -> FrameInfo:
    """What a header says, in our own terms; pure.

    Parameters
    ----------
    header
        Cards of the image and, below them, those of the primary header.
    shape
        (ny, nx) of the image.
    path
        Only its name is looked at, where the header does not say what kind of frame this is.
    settings
        Gives the observer's filter names.
    dialect
        Another table of words.
    extension, notes
        Passed on; notes of the reader come first.
    """
    words = dialect or built_in_dialect()
    said = list(notes)
    exposure_s = _exposure(header, words, said)
    kind = _kind(header, words, path, settings.frames, exposure_s, said)
    calibrated = earlier_steps(header, words.calibrated, said)
    if calibrated and kind in ("bias", "dark", "flat"):
        said.append(f"a {kind} that was calibrated before is not used to make a master.")
        kind = "unknown"
    physical = pixel_unit(header, words.calibrated).physical
    if physical:
        said.append(f"the pixels are in {physical!r}, which no noise can be worked out for; the frame is not used.")
        kind = "unknown"
    filter_name, band = band_of(header, words.keywords, words.bands, settings.filters, kind, said)
    ra_deg, dec_deg = position(header, words.positions, words.keywords["equinox"], said)
    binning = _binning(header, words)
    if header.first_text(words.keywords["colour_mosaic"]):
        said.append("the sensor is a mosaic of coloured pixels: no single band describes it.")
    gain_e_per_adu = _gain(header, words, said)
    read_noise_e = _read_noise(header, words, said)
    scale_arcsec = _scale(header, words, binning, said)
    temperature_c = _temperature(header, words, said)
    mjd_mid = mid_time(header, words.time, exposure_s, said)  # last: where there is none, the last note says why
    return FrameInfo(
        kind=kind,
        band=band,
        filter_name=filter_name,
        object_name=header.first_text(words.keywords["object_name"]),
        camera=header.first_text(words.keywords["camera"]) or clean_text(settings.camera.name),
        mjd_mid=mjd_mid,
        exposure_s=exposure_s,
        ra_deg=ra_deg,
        dec_deg=dec_deg,
        scale_arcsec=scale_arcsec,
        gain_e_per_adu=gain_e_per_adu,
        read_noise_e=read_noise_e,
        saturation_adu=_positive(header, words.keywords["saturation_adu"]),
        nx=shape[1],
        ny=shape[0],
        binning=binning,
        temperature_c=temperature_c,
        extension=extension,
        notes=tuple(said),
        chip=header.first_text(words.keywords["chip"]),
        calibrated=calibrated,
    )


def _positive(header: Header, keywords: list[str]) -> float | None:
    return next((value for _, value in header.numbers(keywords) if value > 0), None)


def _exposure(header: Header, words: Dialect, notes: list[str]) -> float | None:
    for keyword, value in header.numbers(words.keywords["exposure_s"]):
        if value < 0:
            notes.append(f"{keyword} = {value:g} is negative and was ignored.")
            continue
        for pattern, unit_s, name in EXPOSURE_UNITS:
            if re.search(pattern, header.comment(keyword), re.IGNORECASE):
                notes.append(f"{keyword} is in {name} by its comment.")
                return value * unit_s
        return value
    return None


def _letters(text: str) -> str:
    return re.sub(r"[^a-z]", "", text.casefold())


def _kind(
    header: Header, words: Dialect, path: Path, stated_by: Frames, exposure_s: float | None, notes: list[str]
) -> FrameKind:
    meaning = {word: kind for kind, list_ in words.kinds.items() for word in list_}
    kinds: dict[str, FrameKind] = {"light": "light", "bias": "bias", "dark": "dark", "flat": "flat"}
    stated = header.first_text(words.keywords["image_type"])
    name = _letters(stated)
    if name:
        if "master" in name or "combined" in name:
            notes.append(f"{stated!r} is a frame made of others; it is not used.")
            return "unknown"
        if name in meaning:
            if meaning[name] == "other":
                notes.append(f"image type {stated!r} is neither a light nor a calibration frame; it is not used.")
            return kinds.get(meaning[name], "unknown")
        for kind in ("dark", "bias", "flat", "light"):
            if kind in name:
                return kinds[kind]
        notes.append(f"image type {stated!r} is not known; the object's and the file's name were asked.")
    by_pattern = kind_by_pattern(path, stated_by)
    if by_pattern is not None:
        notes.append(f"taken as a {by_pattern} by its place and name, as [frames] in observatory.toml says.")
        return by_pattern
    hints = [_letters(header.first_text(words.keywords["object_name"]))]
    hints += [_letters(part) for part in re.split(r"[^A-Za-z]+|(?<=[a-z])(?=[A-Z])", path.name.split(".")[0])]
    hints.append(_calibration_word(header.first_text(words.keywords["object_name"])))
    for hint in hints:
        if meaning.get(hint) in ("bias", "dark", "flat"):
            notes.append(f"taken as a {meaning[hint]} because it is called {hint!r}; the header does not say.")
            return kinds[meaning[hint]]
    if exposure_s == 0:
        notes.append("taken as a bias because its exposure is 0 s; the header does not say.")
        return "bias"
    notes.append("taken as a light; the header does not say what kind of frame this is.")
    return "light"


def kind_by_pattern(path: Path, stated: Frames) -> FrameKind | None:
    """The kind whose pattern the file's name, or its folders and name, fit; None when no pattern or several kinds do.

    A pattern without a stroke is one of file names; capitals do not matter; ``*`` also stands for folders.
    """
    parts = [part.casefold() for part in path.parts]
    ends = ["/".join(parts[k:]) for k in range(len(parts))]

    def fits(pattern: str) -> bool:
        return any(fnmatchcase(end, pattern.casefold()) for end in (ends if "/" in pattern else ends[-1:]))

    kinds: dict[FrameKind, tuple[str, ...]] = {
        "light": stated.light, "bias": stated.bias, "dark": stated.dark, "flat": stated.flat,
    }  # fmt: skip
    found = [kind for kind, patterns in kinds.items() if any(map(fits, patterns))]
    return found[0] if len(found) == 1 else None


def _calibration_word(name: str) -> str:
    """First word of names like "flat V" or "dark 60 s", '' where a real word follows, as in "Dark River"."""
    first, *others = re.findall(r"[a-z]+", name.casefold()) or [""]
    return first if all(len(word) <= 3 for word in others) else ""


def _binning(header: Header, words: Dialect) -> tuple[int, int]:
    def factor(value: float | None) -> int | None:
        return int(value) if value is not None and value == int(value) and 1 <= value <= 64 else None

    x = factor(_positive(header, words.keywords["binning_x"]))
    y = factor(_positive(header, words.keywords["binning_y"]))
    if x is not None:
        return x, y or x
    found = [int(part) for part in re.findall(r"\d+", header.first_text(words.keywords["binning"]))][:2]
    if found and all(1 <= part <= 64 for part in found):
        return found[0], found[-1]
    return 1, 1


def _gain(header: Header, words: Dialect, notes: list[str]) -> float | None:
    for keyword, value in header.numbers(words.keywords["gain_e_per_adu"]):
        comment = header.comment(keyword).casefold().replace(" ", "")
        if value <= 0:
            continue
        if re.search(r"setting|\bdb\b|[^a-z]db\b", comment):
            notes.append(
                f"{keyword} = {value:g} is a setting of the camera by its comment; it was ignored "
                "(write gain_e_per_adu under [camera] in observatory.toml)."
            )
            continue
        if re.search(r"(adu|dn)[^a-z]*(/|per)e", comment):
            notes.append(f"{keyword} is in ADU per electron by its comment and was inverted.")
            return 1.0 / value
        if value > LARGEST_GAIN:
            notes.append(
                f"{keyword} = {value:g} is a setting of the camera, not electrons per ADU; it was ignored "
                "(write gain_e_per_adu under [camera] in observatory.toml)."
            )
            continue
        return value
    return None


def _read_noise(header: Header, words: Dialect, notes: list[str]) -> float | None:
    for keyword, value in header.numbers(words.keywords["read_noise_e"]):
        comment = header.comment(keyword).casefold()
        if value <= 0:
            continue
        if "adu" in comment and not re.search(r"\be|elec", comment):
            gain = _gain(header, words, [])
            if gain is None:
                notes.append(f"{keyword} is in ADU and the gain is not known; it was ignored.")
                continue
            notes.append(f"{keyword} is in ADU by its comment and was multiplied by the gain.")
            return value * gain
        return value
    return None


def _temperature(header: Header, words: Dialect, notes: list[str]) -> float | None:
    for keyword, value in header.numbers(words.keywords["temperature_c"]):
        if value > 150:
            notes.append(f"{keyword} = {value:g} was read as kelvin.")
            return round(value - 273.15, 3)
        if value > -200:
            return value
    return None


def _scale(header: Header, words: Dialect, binning: tuple[int, int], notes: list[str]) -> float | None:
    """The first that makes sense of: the sky coordinates, a stated scale, pixel size and focal length."""
    pixel_um = _positive(header, words.keywords["pixel_um"])
    focal_mm = _positive(header, words.keywords["focal_length_mm"])
    optics = ARCSEC_PER_RADIAN_MM_PER_UM * pixel_um / focal_mm if pixel_um and focal_mm else None
    for scale_arcsec in (_coordinate_scale(header), _positive(header, words.keywords["scale_arcsec"]), optics):
        if scale_arcsec is not None and SCALE_RANGE_ARCSEC[0] <= scale_arcsec <= SCALE_RANGE_ARCSEC[1]:
            if scale_arcsec is optics and max(binning) > 1:
                notes.append(
                    "the scale follows from pixel size and focal length, the size taken as that of a binned pixel."
                )
            return scale_arcsec
    return None


def _coordinate_scale(header: Header) -> float | None:
    """Arcsec a pixel by the header's sky coordinates."""
    if not re.search("RA|DEC", header.text("CTYPE1").upper()):
        return None
    cd = [header.number(keyword) or 0.0 for keyword in ("CD1_1", "CD1_2", "CD2_1", "CD2_2")]
    area = abs(cd[0] * cd[3] - cd[1] * cd[2])
    if area > 0:
        return math.sqrt(area) * 3600.0
    step = header.number("CDELT1"), header.number("CDELT2")
    return math.sqrt(abs(step[0] * step[1])) * 3600.0 if step[0] and step[1] else None
