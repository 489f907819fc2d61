"""FITS files in every real shape: what one file is, and its pixels on demand."""

from __future__ import annotations

import hashlib
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from reduce.frames.dialect import built_in_dialect, understand
from reduce.frames.extent import DeclaredUnit, cannot_read, declared_units, unpacked
from reduce.frames.header import CardValue, Header
from reduce.frames.readout import Part, Readout, joined_images, one_image, overscan_level
from reduce.frames.treated import SAMPLE_ROWS, STEPS, adu_per_unit, has_no_offset
from reduce.plain_text import clean_text
from reduce.records import FrameError, FrameInfo, Image
from reduce.settings import Settings

if TYPE_CHECKING:
    from numpy.typing import NDArray

MOST_HISTORY = 2000
"""Lines of history that are looked at."""
_LEFT_OUT = frozenset({"", "COMMENT", "HISTORY", "CONTINUE", "END"})


@dataclass(frozen=True, slots=True)
class Frame:
    """A readable file; pixels are read when asked for."""

    path: Path
    info: FrameInfo
    header: dict[str, CardValue]
    """Cards of the image and of the primary header, without commentary."""
    readout: Readout
    """Which stored pixels make the image."""
    unit_adu: float = 1.0
    """ADU that one unit of the stored numbers stands for."""

    def read(self) -> Image:
        """The image as it was read out, ADU, (ny, nx) float32; the overscan's level is still in it.

        Raises
        ------
        FrameError
            The pixels cannot be read, or none is a number.
        """
        image = self.read_rows(0, self.info.ny)
        if not np.isfinite(image).any():
            raise FrameError("the image holds no number at all; take the frame again.")
        return image

    def read_rows(self, first: int, end: int) -> Image:
        """Rows ``first`` to ``end - 1`` of the image, ADU, float32; touches only these where the file allows it.

        A file packed by gzip is unpacked whole, and its check sum looked at.
        """
        image = np.empty((end - first, self.info.nx), np.float32)
        with (
            _plainly(),
            _open(self.path) as units,
            np.errstate(over="ignore", invalid="ignore"),
        ):
            for part in self.readout.parts:
                data = part.data
                low, high = max(first, part.y0), min(end, part.y0 + data.ny)
                if low >= high:
                    continue
                top = (data.y1 - high + part.y0) if data.flip_y else (data.y0 + low - part.y0)
                stored = _stored(units, part, slice(top, top + high - low), slice(data.x0, data.x1))
                turned = stored[:: -1 if data.flip_y else 1, :: -1 if data.flip_x else 1]
                image[low - first : high - first, part.x0 : part.x0 + data.nx] = turned
        return image if self.unit_adu == 1.0 else image * np.float32(self.unit_adu)

    def overscan_rows(self, first: int, end: int) -> Image | None:
        """Level of the overscan at these rows, ADU, to be subtracted; None where the file holds none."""
        if not self.info.overscan:
            return None
        level = np.zeros((self.info.ny, self.info.nx), np.float32)
        with _plainly(), _open(self.path) as units:
            for part in self.readout.parts:
                strip, data = part.overscan, part.data
                if strip is not None:
                    pixels = _stored(units, part, slice(strip.y0, strip.y1), slice(strip.x0, strip.x1))
                    at = np.s_[part.y0 : part.y0 + data.ny, part.x0 : part.x0 + data.nx]
                    level[at] = overscan_level(np.asarray(pixels, np.float32), data)
        return level[first:end] * np.float32(self.unit_adu)

    def relative_gain(self, first: int, end: int) -> Image | None:
        """Gain of each pixel's amplifier over the frame's, for these rows; None where all are alike."""
        if all(part.relative_gain == 1.0 for part in self.readout.parts):
            return None
        gain = np.ones((self.info.ny, self.info.nx), np.float32)
        for part in self.readout.parts:
            gain[part.y0 : part.y0 + part.data.ny, part.x0 : part.x0 + part.data.nx] = part.relative_gain
        return gain[first:end]


def _stored(units: Any, part: Part, rows: slice, columns: slice) -> NDArray[Any]:
    unit = units[part.extension]
    extra = (0,) * (unit.header["NAXIS"] - 2)
    stored: NDArray[Any] = unit.section[(*extra, rows, columns)]
    return stored


def open_frame(path: Path, settings: Settings) -> Frame:
    """What a file is; reads the headers, and of fractional numbers a few rows.

    Raises
    ------
    FrameError
        The file cannot be used; one sentence says why and what to do.
    """
    units = declared_units(path)
    images = [n for n, unit in enumerate(units) if _is_flat(unit.shape)]
    if not images:
        raise FrameError(_why_no_image(units))
    with _plainly() as said, _open(path, headers_only=True) as opened:
        science = next((n for n in images if opened[n].name == "SCI"), None)
        chosen = images[0] if science is None else science
        header = _header_of(opened, chosen)
        others = [_header_of(opened, n) for n in images] if science is None and len(images) > 1 else []
    notes = sorted({clean_text(str(warning.message)) for warning in said})
    words = dict(built_in_dialect().keywords)
    infos = [understand(one, (2, 2), path, settings) for one in others]
    readout = None
    if others:
        axes = [units[n].shape for n in images]
        readout = joined_images(others, images, axes, [info.gain_e_per_adu for info in infos], words, notes)
    if readout is None:
        infos = []
        if len(images) > 1:
            notes.append(f"the file holds {len(images)} images; only that of extension {chosen} is used.")
        readout = one_image(header, chosen, units[chosen].shape, words, notes)
    info = understand(header, (readout.ny, readout.nx), path, settings, extension=chosen, notes=tuple(notes))
    pedestal_adu = next((abs(value) for _, value in header.numbers(words["pedestal_adu"]) if value), None)
    if pedestal_adu is not None:
        said_of_it = f"the header states a pedestal of {pedestal_adu:g} ADU: it is subtracted instead of bias and dark."
        info = replace(info, notes=(*info.notes, said_of_it))
    info = replace(
        info,
        window=readout.window,
        overscan=readout.parts[0].overscan is not None,
        pedestal_adu=pedestal_adu,
    )
    if infos:
        info = _of_all(info, infos)
    unit_adu, info = adu_per_unit(header, built_in_dialect().calibrated, info, settings)
    frame = Frame(path, info, dict(header.values), readout, unit_adu)
    is_float = units[chosen].cards.get("ZBITPIX", units[chosen].cards["BITPIX"]).startswith("-")
    return _without_offset(frame) if is_float and info.kind == "light" and not info.calibrated else frame


def _without_offset(frame: Frame) -> Frame:
    """The frame, taken as calibrated where a sample of its fractional numbers shows that no raw counts are left."""
    middle = frame.info.ny // 2
    sample = frame.read_rows(max(0, middle - SAMPLE_ROWS // 2), min(frame.info.ny, middle + SAMPLE_ROWS // 2))
    if not has_no_offset(sample):
        return frame
    note = "calibrated before it came here (many pixels lie below zero, as no raw count does); no step is done again."
    return replace(frame, info=replace(frame.info, calibrated=STEPS, notes=(*frame.info.notes, note)))


def _of_all(info: FrameInfo, amplifiers: list[FrameInfo]) -> FrameInfo:
    """The info with the mean gain and read noise and the lowest saturation of its amplifiers."""
    gains = [one.gain_e_per_adu for one in amplifiers if one.gain_e_per_adu is not None]
    noises = [one.read_noise_e for one in amplifiers if one.read_noise_e is not None]
    tops = [one.saturation_adu for one in amplifiers if one.saturation_adu is not None]
    n = len(amplifiers)
    return replace(
        info,
        gain_e_per_adu=float(np.mean(gains)) if len(gains) == n else None,
        read_noise_e=float(np.sqrt(np.mean(np.square(noises)))) if len(noises) == n else None,
        saturation_adu=min(tops, default=None),
    )


def _is_flat(shape: tuple[int, ...]) -> bool:
    return len(shape) >= 2 and min(shape[:2]) > 1 and all(axis == 1 for axis in shape[2:])


def _why_no_image(units: list[DeclaredUnit]) -> str:
    if any(unit.is_random_groups for unit in units):
        return "the file holds random groups of an interferometer, not an image; it is not a camera frame."
    shapes = [unit.shape for unit in units if unit.shape]
    if any(0 in shape for shape in shapes):
        return "the image has no pixels; take the frame again."
    for shape in shapes:
        if len(shape) == 3 and 3 in (shape[0], shape[2]) and min(shape) > 1:
            return "the image has three colour planes; save the green one, as it was read out, as a frame of its own."
        if len(shape) > 2:
            size = " × ".join(map(str, shape[:5]))
            return f"the image is a cube of {size} pixels; save its planes as frames of their own."
    if shapes:
        return "the file holds a row of numbers, not an image; it is not a camera frame."
    return "the file holds no image; it is not a camera frame."


def _header_of(opened: Any, chosen: int) -> Header:
    """Cards of the chosen unit over those of the primary one; a card that cannot be read is left out."""
    values: dict[str, CardValue] = {}
    comments: dict[str, str] = {}
    history: list[str] = []
    for unit in dict.fromkeys((0, chosen)):
        for card in opened[unit].header.cards:
            try:
                key, value, comment = card.keyword, card.value, card.comment
            except Exception:  # astropy raises many kinds for a card it cannot parse
                continue
            if key in ("HISTORY", "COMMENT") and len(history) < MOST_HISTORY:
                history.append(clean_text(value))
            if key in _LEFT_OUT:
                continue
            values[key] = value if isinstance(value, (str, int, float, bool)) else None
            comments[key] = comment
    return Header(values, comments, tuple(history))


@contextmanager
def _plainly() -> Iterator[list[warnings.WarningMessage]]:
    """Collect astropy's warnings; turn what it raises for a damaged file into one sentence."""
    with warnings.catch_warnings(record=True) as said:
        warnings.simplefilter("always")
        try:
            yield said
        except FrameError:
            raise
        except MemoryError as error:
            raise FrameError("the image does not fit into memory; free some, or bin the frame.") from error
        except (PermissionError, FileNotFoundError, IsADirectoryError) as error:
            raise FrameError(cannot_read(error)) from error
        except Exception as error:
            raise FrameError(f"the file is damaged ({clean_text(error, 100)}); copy it again.") from error


@contextmanager
def _open(path: Path, headers_only: bool = False) -> Iterator[Any]:
    """Units of a file; one packed by gzip is unpacked into memory, as far as it is needed."""
    from astropy.io import fits

    content = unpacked(path, headers_only)
    if content is not None and headers_only:
        warnings.filterwarnings("ignore", message="File may have been truncated")  # on purpose
    with fits.open(
        content or path, mode="readonly", memmap=False, lazy_load_hdus=True, ignore_missing_simple=False
    ) as units:
        yield units


def frame_id(path: Path) -> str:
    """SHA-256 of the file's bytes: the frame's name for ever.

    Raises
    ------
    FrameError
        The file cannot be read.
    """
    try:
        with open(path, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError as error:
        raise FrameError(cannot_read(error)) from error


def iso_time(mjd: float) -> str:
    """UTC to the millisecond in the form of FITS: ``2024-03-11T00:00:20.000``."""
    return str(np.datetime64("1858-11-17T00:00:00.000") + np.timedelta64(round(mjd * 86400000.0), "ms"))
