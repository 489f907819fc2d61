"""Which calibration frames make one master; nothing is read here.

- bias: frames of one camera, size, window, binning, gain, and temperature (±2 °C);
- dark: of one exposure, too; kept with the bias level in it, so that a dark of the light's own exposure needs no bias;
- flat: of one filter; temperature does not matter;
- shutter: flats of one filter with short and with long exposures, once for a camera;
- fringe: lights of a band that the settings name, of four pointings or more.

A season is cut into groups of whole nights, in order of time: a group ends with the night that brings it to
15 biases, 9 darks or 5 flats (common practice). What is taken later joins the last group while that is too small, and
begins a new one otherwise: it never changes a master of earlier nights that was big enough.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from reduce.frames.master_sets import SAME_TEMPERATURE_C, CalibrationFrame, MasterKind, MasterPlan, Signature
from reduce.records import FrameInfo

ENOUGH = {"bias": 15, "dark": 9, "flat": 5}
"""Frames that make a master which needs no other night's."""
SHUTTER_SHORT_S, SHUTTER_LEVER = 10.0, 4.0
"""A shutter is seen in flats this short beside some that are so many times longer."""
SHUTTER_FRAMES = 2
"""Least number of short and of long ones."""
ORDER = {"bias": 0, "dark": 1, "shutter": 2, "flat": 3, "fringe": 4}
FRINGE_EXPOSURE_S = 30.0
FRINGE_FRAMES, FRINGE_POINTINGS, FRINGE_EACH = 9, 4, 3
"""A fringe frame wants so many frames, of so many pointings, no more than these of each (common practice)."""
SAME_POINTING_DEG = 0.3


def plan_masters(
    frames: Iterable[tuple[str, Path, FrameInfo]], longitude_deg: float = 0.0, fringe_bands: Sequence[str] = ()
) -> list[MasterPlan]:
    """Masters that calibration frames (id, path, info) can make, in the order in which they must be built; frames of
    other kinds and copies of a frame are left out. The order of ``frames`` does not matter.

    Parameters
    ----------
    longitude_deg
        Of the site, north through east: nights end at its noon.
    fringe_bands
        Bands whose lights make fringe frames, too.
    """
    frames = list(frames)
    groups: dict[tuple[Any, ...], list[CalibrationFrame]] = defaultdict(list)
    seen: set[str] = set()
    for frame in sorted((CalibrationFrame(*row) for row in frames), key=lambda frame: (frame.id, str(frame.path))):
        if frame.id not in seen and frame.info.kind in ("bias", "dark", "flat"):
            seen.add(frame.id)
            groups[_group(frame.info)].append(frame)
    plans: list[MasterPlan] = []
    for key in sorted(groups, key=repr):
        for run in [groups[key]] if key[0] == "flat" else _by_temperature(groups[key]):
            plans += [_plan(key[0], some) for some in _by_nights(run, ENOUGH[key[0]], longitude_deg)]
    plans += _shutters([plan for plan in plans if plan.kind == "flat"])
    plans += _fringes([CalibrationFrame(*row) for row in frames], fringe_bands)
    return sorted(plans, key=lambda plan: (ORDER[plan.kind], plan.label, plan.mjd or 0.0, plan.inputs[0].id))


def _group(info: FrameInfo) -> tuple[Any, ...]:
    exposure = round(info.exposure_s, 2) if info.kind == "dark" and info.exposure_s is not None else None
    filter_name = (info.band or info.filter_name) if info.kind == "flat" else ""
    return info.kind, Signature.of(info), exposure, filter_name


def _by_temperature(frames: Sequence[CalibrationFrame]) -> list[list[CalibrationFrame]]:
    """Runs of frames that lie within ±2 °C; frames of unknown temperature are one run of their own."""
    unknown = [frame for frame in frames if frame.info.temperature_c is None]
    known = sorted(
        (frame.info.temperature_c, frame.id, frame) for frame in frames if frame.info.temperature_c is not None
    )
    runs: list[list[CalibrationFrame]] = [unknown] if unknown else []
    coldest = float("-inf")
    for temperature_c, _, frame in known:
        if temperature_c - coldest > 2 * SAME_TEMPERATURE_C:
            runs.append([])
            coldest = temperature_c
        runs[-1].append(frame)
    return runs


def _by_nights(frames: Sequence[CalibrationFrame], enough: int, longitude_deg: float) -> list[list[CalibrationFrame]]:
    """Groups of whole nights in order of time; frames without a time are one night before all others."""
    nights: dict[int, list[CalibrationFrame]] = defaultdict(list)
    for frame in frames:
        mjd = frame.info.mjd_mid
        nights[-1 if mjd is None else math.floor(mjd + longitude_deg / 360.0 + 0.5)].append(frame)
    groups: list[list[CalibrationFrame]] = []
    for night in sorted(nights):
        if not groups or len(groups[-1]) >= enough:
            groups.append([])
        groups[-1] += nights[night]
    return groups


def _shutters(flats: Sequence[MasterPlan]) -> list[MasterPlan]:
    """The first group of flats of each camera that shows its shutter: later flats leave the map as it is."""
    found: dict[Signature, MasterPlan] = {}
    for plan in sorted(flats, key=lambda plan: (plan.mjd or 0.0, plan.label)):
        lengths = sorted(frame.info.exposure_s for frame in plan.inputs if frame.info.exposure_s)
        if plan.signature in found or not lengths:
            continue
        short = [t for t in lengths if t <= min(SHUTTER_SHORT_S, lengths[-1] / SHUTTER_LEVER)]
        long = [t for t in lengths if t >= lengths[-1] / 2.0]
        if min(len(short), len(long)) >= SHUTTER_FRAMES:
            found[plan.signature] = _plan("shutter", plan.inputs)
    return list(found.values())


def _fringes(frames: Sequence[CalibrationFrame], bands: Sequence[str]) -> list[MasterPlan]:
    """In order of time, each set of lights of a band that is large enough and of enough pointings."""
    open_sets: dict[tuple[Any, ...], list[CalibrationFrame]] = defaultdict(list)
    plans: list[MasterPlan] = []
    lights = {f.id: f for f in frames if f.info.kind == "light" and f.info.band in bands and not f.info.calibrated}
    for frame in sorted(lights.values(), key=lambda frame: (frame.info.mjd_mid or 0.0, frame.id)):
        info = frame.info
        if (info.exposure_s or 0.0) < FRINGE_EXPOSURE_S or info.ra_deg is None or info.dec_deg is None:
            continue
        some = open_sets[Signature.of(info), info.band]
        if sum(_same_pointing(info, other.info) for other in some) >= FRINGE_EACH:
            continue
        some.append(frame)
        firsts = [one for k, one in enumerate(some) if not any(_same_pointing(one.info, b.info) for b in some[:k])]
        if len(some) >= FRINGE_FRAMES and len(firsts) >= FRINGE_POINTINGS:
            plans.append(_plan("fringe", some))
            open_sets[Signature.of(info), info.band] = []
    return plans


def _same_pointing(a: FrameInfo, b: FrameInfo) -> bool:
    if a.ra_deg is None or b.ra_deg is None or a.dec_deg is None or b.dec_deg is None:
        return False
    east = ((a.ra_deg - b.ra_deg + 180.0) % 360.0 - 180.0) * math.cos(math.radians(a.dec_deg))
    return math.hypot(east, a.dec_deg - b.dec_deg) < SAME_POINTING_DEG


def _plan(kind: MasterKind, frames: Sequence[CalibrationFrame]) -> MasterPlan:
    first = frames[0].info
    of_filter = kind in ("flat", "shutter", "fringe")
    cold = [frame.info.temperature_c for frame in frames if frame.info.temperature_c is not None]
    times = [frame.info.mjd_mid for frame in frames if frame.info.mjd_mid is not None]
    return MasterPlan(
        kind=kind,
        signature=Signature.of(first),
        filter_name=first.filter_name if of_filter else "",
        band=first.band if of_filter else None,
        exposure_s=first.exposure_s if kind in ("dark", "flat") else None,
        temperature_c=round((min(cold) + max(cold)) / 2.0, 2) if cold else None,
        inputs=tuple(sorted(frames, key=lambda frame: frame.id)),
        mjd=round((min(times) + max(times)) / 2.0, 4) if times else None,
    )
