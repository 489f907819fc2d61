"""Masters on disk: built in blocks of rows, never more than one block of all inputs in memory.

`master_plans` says which frames make one, `master_sets` which suits a frame; neither reads anything.
"""

from __future__ import annotations

import math
import os
import tempfile
from collections.abc import Iterable, Mapping
from dataclasses import astuple, replace
from pathlib import Path
from typing import Any

import numpy as np

from reduce.frames.combine import combine, typical_sigma
from reduce.frames.detector_check import DetectorMeasure
from reduce.frames.extent import declared_units
from reduce.frames.flats import Prepare, choose_flats
from reduce.frames.fringe import finished, prepare_skies
from reduce.frames.master_sets import ChosenMasters, Master, MasterPlan, choose_masters
from reduce.frames.reader import Frame, open_frame
from reduce.frames.shutter import shutter_map
from reduce.plain_text import clean_text
from reduce.records import FrameError, Image
from reduce.settings import Settings

BLOCK_PIXELS = 4_000_000
"""Pixels of all inputs together that are read at once (16 MB; combining them needs a few times as much)."""
OF_LIGHT = ("flat", "shutter")
UNKNOWN = -1.0
"""Stands in a master's header for a number that is not known."""


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
    if plan.kind in OF_LIGHT and lower.bias is None and lower.dark is None:
        raise FrameError(f"{plan.label} needs bias frames, or darks: take some.")
    digest, path = _named(plan, lower, folder)
    found = _stored(plan, digest, path)
    if found is not None:
        return found
    frames = [open_frame(frame.path, settings) for frame in plan.inputs]
    notes: list[str] = []
    prepare: list[Prepare] = [_without_overscan(frame) for frame in frames]
    detector = DetectorMeasure()
    if plan.kind in OF_LIGHT:
        frames, prepare, detector = choose_flats(plan, frames, lower, settings, notes)
    if plan.kind == "fringe":
        prepare = prepare_skies(frames, lower)
    noise: float | None
    if plan.kind == "shutter":
        notes.clear()
        data, noise = shutter_map(frames, prepare, notes), None
    else:
        data, noise = _combine_streaming(frames, prepare, plan.signature.nx, plan.signature.ny)
    if plan.kind == "fringe":
        data = finished(data, None if noise is None else noise / math.sqrt(len(frames)), notes)
    if plan.kind == "flat":
        middle = float(np.nanmedian(data))
        data, noise = (data / np.float32(middle)).astype(np.float32), None if noise is None else noise / middle
    if len(frames) < 3:
        notes.append(f"made of {len(frames)} frame(s): cosmic rays cannot be told from signal.")
    cards = {
        "DIGEST": digest, "NINPUT": len(frames),
        "SIGMA1": UNKNOWN if noise is None else noise,
        **{f"DETECT{k}": UNKNOWN if value is None else value for k, value in enumerate(astuple(detector), 1)},
        **{f"NOTE{k}": _ascii(note) for k, note in enumerate(notes, 1)},
    }  # fmt: skip
    _write(path, data, plan.kind, cards)
    made = _stored(plan, digest, path)
    if made is None:
        raise FrameError(f"{plan.label} could not be written to {clean_text(folder)}; check the disk.")
    return made


def _lower(plan: MasterPlan, masters: Iterable[Master]) -> ChosenMasters:
    """Masters that go into this one."""
    if plan.kind in ("bias", "dark"):
        return ChosenMasters()
    lower = choose_masters(replace(plan.inputs[0].info, mjd_mid=plan.mjd), masters)
    return replace(lower, fringe=None, shutter=None if plan.kind == "shutter" else lower.shutter)


def _without_overscan(frame: Frame) -> Prepare:
    def prepare(rows: Image, first: int, end: int) -> Image:
        overscan = frame.overscan_rows(first, end)
        return rows if overscan is None else rows - overscan

    return prepare


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
        detector = _detector(header) if plan.kind == "flat" else None
    except (FrameError, OSError, KeyError, ValueError):
        return None
    return Master(
        kind=plan.kind, digest=digest, path=path, signature=plan.signature,
        filter_name=plan.filter_name, band=plan.band,
        exposure_s=plan.exposure_s, temperature_c=plan.temperature_c,
        inputs=tuple(frame.id for frame in plan.inputs), n_inputs=n,
        noise=single / math.sqrt(n) if single >= 0 else None, single_noise=single if single >= 0 else None, notes=notes,
        mjd=plan.mjd, detector=detector,
    )  # fmt: skip


def _detector(header: Any) -> DetectorMeasure:
    values = [float(header[f"DETECT{k}"]) for k in range(1, 8)]
    gain, gain_err, _, read_noise_e, straight, bent, full = (None if value < 0 else value for value in values)
    return DetectorMeasure(gain, gain_err, int(values[2]), read_noise_e, straight, bent, full)
