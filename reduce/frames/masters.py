"""Masters on disk: built in blocks of rows, never more than one block of all inputs in memory.

Grouping and choosing, which read nothing, are in `master_sets`.
"""

from __future__ import annotations

import math
import os
import tempfile
from collections.abc import Callable, Iterable, Mapping
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from reduce.frames.combine import combine, typical_sigma
from reduce.frames.detector import CONVERTER_TOPS_ADU, LARGEST_FULL_SHARE, saturation_level
from reduce.frames.extent import declared_units
from reduce.frames.master_sets import (
    ChosenMasters,
    Master,
    MasterPlan,
    choose_masters,
    same_exposure,
)
from reduce.frames.reader import Frame, open_frame
from reduce.plain_text import clean_text
from reduce.records import FrameError, Image
from reduce.settings import Settings

BLOCK_PIXELS = 4_000_000
"""Pixels of all inputs together that are read at once (16 MB; combining them needs a few times as much)."""
FLAT_RANGE = (0.10, 0.80)
"""Levels of a usable flat as fractions of saturation (common practice)."""
LEVEL_SAMPLE = 250_000
"""Pixels that the level of a flat is taken from."""

Prepare = Callable[[Image, int, int], Image]
"""(rows as read, first, end) → rows to combine."""


def build_master(plan: MasterPlan, masters: Iterable[Master], folder: Path, settings: Settings) -> Master:
    """The master of a plan; built only when it is not in ``folder`` yet.

    Parameters
    ----------
    plan
        From `plan_masters`.
    masters
        Those that stand already; flats take their bias and dark from them.
    folder
        Where masters lie, each under its digest; is made when missing.
    settings
        For the saturation level, where headers are silent.

    Raises
    ------
    FrameError
        It cannot be made, in one sentence.
    """
    lower = _lower(plan, masters)
    if plan.kind == "flat" and lower.bias is None and lower.dark is None:
        raise FrameError(f"{plan.label} needs bias frames, or darks: take some.")
    digest, path = _named(plan, lower, folder)
    found = _stored(plan, digest, path)
    if found is not None:
        return found
    frames = [open_frame(frame.path, settings) for frame in plan.inputs]
    notes: list[str] = []
    prepare: list[Prepare] = [lambda rows, first, end: rows] * len(frames)
    if plan.kind == "flat":
        frames, prepare = _flats(plan, frames, lower, settings, notes)
    data, noise = _combine_streaming(frames, prepare, plan.signature.nx, plan.signature.ny)
    if plan.kind == "flat":
        middle = float(np.nanmedian(data))
        data, noise = (data / np.float32(middle)).astype(np.float32), None if noise is None else noise / middle
    if len(frames) < 3:
        notes.append(f"made of {len(frames)} frame(s): cosmic rays cannot be told from signal.")
    cards = {
        "DIGEST": digest, "NINPUT": len(frames),
        "SIGMA1": -1.0 if noise is None else noise,
        **{f"NOTE{k}": _ascii(note) for k, note in enumerate(notes, 1)},
    }  # fmt: skip
    _write(path, data, plan.kind, cards)
    made = _stored(plan, digest, path)
    if made is None:
        raise FrameError(f"{plan.label} could not be written to {clean_text(folder)}; check the disk.")
    return made


def _lower(plan: MasterPlan, masters: Iterable[Master]) -> ChosenMasters:
    """Masters that go into this one."""
    return choose_masters(plan.inputs[0].info, masters) if plan.kind == "flat" else ChosenMasters()


def _named(plan: MasterPlan, lower: ChosenMasters, folder: Path) -> tuple[str, Path]:
    digest = plan.digest([d for d in lower.digests() if d is not None])
    return digest, folder / f"{plan.kind}-{digest[:32]}.fits"


def standing_master(
    plan: MasterPlan, masters: Iterable[Master], folder: Path, known: Mapping[str, Master]
) -> Master | None:
    """The master of a plan if it has been built; nothing is built here.

    ``known`` are masters found earlier by digest: they are not looked for on the disk again.
    """
    digest, path = _named(plan, _lower(plan, masters), folder)
    return known.get(digest) or _stored(plan, digest, path)


def _ascii(text: str) -> str:
    return clean_text(text, 300).encode("ascii", "replace").decode()


def _combine_streaming(frames: list[Frame], prepare: list[Prepare], nx: int, ny: int) -> tuple[Image, float | None]:
    data = np.empty((ny, nx), np.float32)
    variance = np.empty((ny, nx), np.float32)
    rows = max(1, BLOCK_PIXELS // (len(frames) * nx))
    for first in range(0, ny, rows):
        end = min(ny, first + rows)
        stack = np.empty((len(frames), end - first, nx), np.float32)
        for k, frame in enumerate(frames):
            stack[k] = prepare[k](frame.read_rows(first, end), first, end)
        data[first:end], variance[first:end] = combine(stack)
    if not np.isfinite(data).any():
        raise FrameError("the calibration frames hold no number at all; take them again.")
    return data, typical_sigma(variance, len(frames))


def _flats(
    plan: MasterPlan, frames: list[Frame], lower: ChosenMasters, settings: Settings, notes: list[str]
) -> tuple[list[Frame], list[Prepare]]:
    """Flats of a usable level, each to be freed of its pedestal and divided by its own level."""
    kept: list[Frame] = []
    prepare: list[Prepare] = []
    levels: list[float] = []
    for frame in frames:
        image = frame.read()
        step = max(1, math.isqrt(image.size // LEVEL_SAMPLE))
        fraction, lowest = _flat_level(image[::step, ::step], frame, settings)
        levels.append(fraction)
        pedestal = pedestal_adu(lower, frame.info.exposure_s)
        level = float(np.nanmedian((image - pedestal)[::step, ::step]))
        if lowest <= fraction <= FLAT_RANGE[1] and level > 0:
            kept.append(frame)
            prepare.append(_divide(lower, frame.info.exposure_s, level))
    if not kept:
        raise FrameError(
            f"{plan.label}: all {len(frames)} flats are at {100 * min(levels):.0f}–{100 * max(levels):.0f} % of "
            "saturation, outside 10–80 %; take them again with another exposure, or state the saturation_adu of the "
            "camera under [camera] in observatory.toml."
        )
    if len(kept) < len(frames):
        notes.append(
            f"{len(frames) - len(kept)} of {len(frames)} flats are not at 10 to 80 % of saturation and left out."
        )
    return kept, prepare


def _flat_level(sample: Image, frame: Frame, settings: Settings) -> tuple[float, float]:
    """Level of a flat as a fraction of saturation, and the lowest that is usable.

    Where nobody states the saturation, the converter may be one of few bits: what would be enough for the smallest is.
    """
    saturation_adu, not_stated = saturation_level(frame.info, settings)
    if not not_stated:
        return float(np.nanmedian(sample)) / saturation_adu, FLAT_RANGE[0]
    if np.mean(sample == np.nanmax(sample)) > LARGEST_FULL_SHARE:
        return 1.0, FLAT_RANGE[0]
    return float(np.nanmedian(sample)) / saturation_adu, FLAT_RANGE[0] * min(CONVERTER_TOPS_ADU) / saturation_adu


def _divide(lower: ChosenMasters, exposure_s: float | None, level: float) -> Prepare:
    return lambda rows, first, end: (rows - pedestal_adu(lower, exposure_s, slice(first, end))) / np.float32(level)


def pedestal_adu(chosen: ChosenMasters, exposure_s: float | None, rows: slice = slice(None)) -> Image:
    """Bias level and dark signal to subtract from (rows of) a frame of this exposure, ADU; needs a bias or a dark.

    Without a dark of the same exposure: bias + (dark - bias) t / t_dark.
    """
    if chosen.dark is not None and (chosen.bias is None or same_exposure(chosen.dark.exposure_s, exposure_s)):
        return read_master(chosen.dark.path)[rows]
    assert chosen.bias is not None
    bias = read_master(chosen.bias.path)[rows]
    if chosen.dark is None:
        return bias
    factor = np.float32(dark_factor(chosen, exposure_s))
    return np.asarray(bias + (read_master(chosen.dark.path)[rows] - bias) * factor, dtype=np.float32)


def dark_factor(chosen: ChosenMasters, exposure_s: float | None) -> float:
    """How much longer the frame is than the dark; 1 when they are the same or the frame's length is not known."""
    dark_s = chosen.dark.exposure_s if chosen.dark is not None else None
    if not dark_s or exposure_s is None or same_exposure(dark_s, exposure_s):
        return 1.0
    return exposure_s / dark_s


# ---- files -----------------------------------------------------------------------------------------------


def _write(path: Path, data: Image, kind: str, cards: dict[str, Any]) -> None:
    """Whole or not at all: another name first, then put in place."""
    from astropy.io import fits

    unit = fits.PrimaryHDU(data)
    unit.header["IMAGETYP"] = f"master {kind}"
    unit.header.update(cards)
    temporary = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile(dir=path.parent, prefix=".", suffix=".part", delete=False) as file:
            temporary = Path(file.name)
            unit.writeto(file)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temporary, path)
    except OSError as error:
        if temporary is not None:
            temporary.unlink(missing_ok=True)
        raise FrameError(
            f"a master frame cannot be written to {clean_text(path.parent)} ({clean_text(error.strerror or error)})."
        ) from error


def _stored(plan: MasterPlan, digest: str, path: Path) -> Master | None:
    """The master that lies at ``path``, None when it is missing or damaged."""
    from astropy.io import fits

    try:
        declared_units(path)
        header = fits.getheader(path)
        if header["DIGEST"] != digest or (header["NAXIS1"], header["NAXIS2"]) != (plan.signature.nx, plan.signature.ny):
            return None
        n, single = int(header["NINPUT"]), float(header["SIGMA1"])
        notes = tuple(clean_text(header[f"NOTE{k}"]) for k in range(1, 10) if f"NOTE{k}" in header)
    except (FrameError, OSError, KeyError, ValueError):
        return None
    return Master(
        kind=plan.kind, digest=digest, path=path, signature=plan.signature,
        filter_name=plan.filter_name, band=plan.band,
        exposure_s=plan.exposure_s, temperature_c=plan.temperature_c,
        inputs=tuple(frame.id for frame in plan.inputs), n_inputs=n,
        noise=single / math.sqrt(n) if single >= 0 else None, single_noise=single if single >= 0 else None, notes=notes,
    )  # fmt: skip


@lru_cache(maxsize=8)
def read_master(path: Path) -> Image:
    """Pixels of a master, (ny, nx) float32, read-only; kept, as a night uses the same few again and again.

    Raises
    ------
    FrameError
        The file is gone or damaged.
    """
    from astropy.io import fits

    try:
        data = np.ascontiguousarray(fits.getdata(path, memmap=False), dtype=np.float32)
    except Exception as error:  # astropy raises many kinds for a damaged file
        raise FrameError(f"master frame {clean_text(path.name)} cannot be read; reduce again to rebuild it.") from error
    data.flags.writeable = False
    return data
