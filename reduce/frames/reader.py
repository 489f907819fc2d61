"""FITS files in every real shape: what one file is, and its pixels on demand."""

from __future__ import annotations

import hashlib
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from reduce.frames.dialect import built_in_dialect, understand
from reduce.frames.extent import cannot_read, declared_units
from reduce.frames.header import CardValue, Header
from reduce.frames.section import Section, trim_section
from reduce.plain_text import clean_text
from reduce.records import FrameError, FrameInfo, Image
from reduce.settings import Settings

if TYPE_CHECKING:
    from numpy.typing import NDArray

_LEFT_OUT = frozenset({"", "COMMENT", "HISTORY", "CONTINUE", "END"})


@dataclass(frozen=True, slots=True)
class Frame:
    """A readable file; pixels are read when asked for."""

    path: Path
    info: FrameInfo
    header: dict[str, CardValue]
    """Cards of the image and of the primary header, without commentary."""
    section: Section | None
    """Part of the stored image that is used; None for all of it."""

    def read(self) -> Image:
        """The image, ADU, (ny, nx) float32.

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
        """Rows ``first`` to ``end - 1`` of the image, ADU, float32; touches only these where the file allows it."""
        y0, x0, x1 = (self.section.y0, self.section.x0, self.section.x1) if self.section else (0, 0, self.info.nx)
        with _plainly(), _open(self.path) as units, np.errstate(over="ignore", invalid="ignore"):
            unit = units[self.info.extension]
            extra = (0,) * (unit.header["NAXIS"] - 2)
            stored: NDArray[Any] = unit.section[(*extra, slice(y0 + first, y0 + end), slice(x0, x1))]
            return np.ascontiguousarray(stored, dtype=np.float32)


def open_frame(path: Path, settings: Settings) -> Frame:
    """What a file is; reads headers only.

    Raises
    ------
    FrameError
        The file cannot be used; one sentence says why and what to do.
    """
    units = declared_units(path)
    images = [n for n, unit in enumerate(units) if _is_flat(unit.shape)]
    if not images:
        raise FrameError(_why_no_image([unit.shape for unit in units if unit.shape]))
    with _plainly() as said, _open(path) as opened:
        chosen = next((n for n in images if opened[n].name == "SCI"), images[0])
        header = _header_of(opened, chosen)
    shape = units[chosen].shape
    notes = sorted({clean_text(str(warning.message)) for warning in said})
    if len(images) > 1:
        notes.append(f"the file holds {len(images)} images; only that of extension {chosen} is used.")
    words = built_in_dialect().keywords
    section = trim_section(header, shape[:2], words["trim_section"], words["overscan_section"], notes)
    ny, nx = (section.ny, section.nx) if section else (shape[1], shape[0])
    info = understand(header, (ny, nx), path, settings, extension=chosen, notes=tuple(notes))
    return Frame(path, info, dict(header.values), section)


def _is_flat(shape: tuple[int, ...]) -> bool:
    return len(shape) >= 2 and min(shape[:2]) > 1 and all(axis == 1 for axis in shape[2:])


def _why_no_image(shapes: list[tuple[int, ...]]) -> str:
    if any(0 in shape for shape in shapes):
        return "the image has no pixels; take the frame again."
    for shape in shapes:
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
    for unit in dict.fromkeys((0, chosen)):
        for card in opened[unit].header.cards:
            try:
                key, value, comment = card.keyword, card.value, card.comment
            except Exception:  # astropy raises many kinds for a card it cannot parse
                continue
            if key in _LEFT_OUT:
                continue
            values[key] = value if isinstance(value, (str, int, float, bool)) else None
            comments[key] = comment
    return Header(values, comments)


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
def _open(path: Path) -> Iterator[Any]:
    from astropy.io import fits

    with fits.open(path, mode="readonly", memmap=False, lazy_load_hdus=True, ignore_missing_simple=False) as units:
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


def inspect_file(path: Path, settings: Settings) -> dict[str, Any]:
    """What a file is and what was understood of it, as plain data: unknown numbers are None.

    Raises nothing for a bad file: ``usable`` is then False and ``reason`` says why.
    """
    try:
        frame = open_frame(path, settings)
        frame.read()
    except FrameError as error:
        return {**dict.fromkeys(_INSPECTED), "file": str(path), "usable": False, "notes": [], "reason": str(error)}
    info = asdict(frame.info)
    return {
        **{key: info.get(key) for key in _INSPECTED},
        "file": str(path),
        "usable": True,
        "filter": frame.info.filter_name,
        "object": frame.info.object_name,
        "mid_time": None if frame.info.mjd_mid is None else iso_time(frame.info.mjd_mid),
        "mjd_mid": frame.info.mjd_mid,
        "binning": list(frame.info.binning),
        "notes": list(frame.info.notes),
        "reason": "",
    }


_INSPECTED = (
    "file", "usable", "kind", "band", "filter", "mid_time", "mjd_mid", "exposure_s", "ra_deg", "dec_deg",
    "scale_arcsec", "gain_e_per_adu", "read_noise_e", "saturation_adu", "nx", "ny", "binning", "temperature_c",
    "camera", "object", "notes", "reason",
)  # fmt: skip


def iso_time(mjd: float) -> str:
    """UTC to the millisecond in the form of FITS: ``2024-03-11T00:00:20.000``."""
    return str(np.datetime64("1858-11-17T00:00:00.000") + np.timedelta64(round(mjd * 86400000.0), "ms"))
