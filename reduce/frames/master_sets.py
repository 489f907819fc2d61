"""Master bias, dark and flat: which frames belong together, and which masters suit a frame; nothing is read here.

A master's digest names its kind, its input frames and the masters used to make it: it never changes once it stands and
is the same, byte for byte, whoever builds it.

- bias: frames of one camera, size, binning, gain setting and temperature (±2 °C);
- dark: of one exposure, too; kept with the bias level in it, so that a dark of the light's own exposure needs no bias;
- flat: of one filter; temperature does not matter.
"""

from __future__ import annotations

import hashlib
import json
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from reduce.records import FrameInfo

MasterKind = Literal["bias", "dark", "flat"]

MASTER_VERSION = 1
"""Raise it when the same inputs would give other pixels."""
SAME_TEMPERATURE_C = 2.0
SAME_EXPOSURE = 0.005
"""Fraction by which exposures of "the same length" may differ, plus 5 ms."""


@dataclass(frozen=True, slots=True)
class Signature:
    """What calibration frames and a light must have in common."""

    camera: str
    nx: int
    ny: int
    binning: tuple[int, int]
    gain_e_per_adu: float | None

    @classmethod
    def of(cls, info: FrameInfo) -> Signature:
        """Of one frame."""
        return cls(info.camera, info.nx, info.ny, info.binning, info.gain_e_per_adu)

    def suits(self, other: Signature) -> bool:
        """The same detector read out in the same way; a gain that one side does not state is no obstacle."""
        gains = self.gain_e_per_adu, other.gain_e_per_adu
        same_gain = None in gains or gains[0] == gains[1]
        return same_gain and (self.camera, self.nx, self.ny, self.binning) == (
            other.camera, other.nx, other.ny, other.binning,
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class CalibrationFrame:
    """One input of a master."""

    id: str
    path: Path
    info: FrameInfo


@dataclass(frozen=True, slots=True)
class MasterPlan:
    """Frames that make one master, by id."""

    kind: MasterKind
    signature: Signature
    filter_name: str
    band: str | None
    exposure_s: float | None
    """Of darks."""
    temperature_c: float | None
    """Middle of the inputs'."""
    inputs: tuple[CalibrationFrame, ...]

    @property
    def label(self) -> str:
        """What a person calls it; unique among plans."""
        what = {
            "bias": "bias",
            "dark": f"dark {self.exposure_s:g} s" if self.exposure_s is not None else "dark",
            "flat": f"flat {self.band or self.filter_name}",
        }[self.kind]
        cold = f", {self.temperature_c:.0f} °C" if self.temperature_c is not None and self.kind != "flat" else ""
        one = self.signature
        gain = f", gain {one.gain_e_per_adu:g}" if one.gain_e_per_adu is not None else ""
        size = f"{one.nx}×{one.ny}, binning {one.binning[0]}×{one.binning[1]}{gain}"
        return f"{what} ({one.camera or 'camera not named'}, {size}{cold})"

    def digest(self, lower: Iterable[str]) -> str:
        """Name of the master these inputs and lower masters (digests) make."""
        content = [MASTER_VERSION, self.kind, sorted(frame.id for frame in self.inputs), list(lower)]
        return hashlib.sha256(json.dumps(content).encode()).hexdigest()


@dataclass(frozen=True, slots=True)
class Master:
    """A master frame on disk."""

    kind: MasterKind
    digest: str
    path: Path
    signature: Signature
    filter_name: str
    band: str | None
    exposure_s: float | None
    temperature_c: float | None
    inputs: tuple[str, ...]
    """Ids of all planned frames."""
    n_inputs: int
    """How many of them were used."""
    noise: float | None
    """Noise of one pixel: ADU, for a flat as a fraction; None when one frame cannot tell."""
    single_noise: float | None
    """The same of one input frame: of a bias, the read noise."""
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ChosenMasters:
    """What suits one frame; None where nothing does, with the reason in ``notes``."""

    bias: Master | None = None
    dark: Master | None = None
    flat: Master | None = None
    notes: tuple[str, ...] = ()

    def digests(self) -> list[str | None]:
        """Of bias, dark and flat."""
        return [master.digest if master is not None else None for master in (self.bias, self.dark, self.flat)]


# ---- plan ------------------------------------------------------------------------------------------------


def plan_masters(frames: Iterable[tuple[str, Path, FrameInfo]]) -> list[MasterPlan]:
    """Masters that calibration frames (id, path, info) can make: bias, then dark, then flat; frames of other kinds and
    copies of a frame are left out. The order of ``frames`` does not matter.
    """
    groups: dict[tuple[Any, ...], list[CalibrationFrame]] = defaultdict(list)
    seen: set[str] = set()
    for frame in sorted((CalibrationFrame(*row) for row in frames), key=lambda frame: (frame.id, str(frame.path))):
        if frame.id not in seen and frame.info.kind in ("bias", "dark", "flat"):
            seen.add(frame.id)
            groups[_group(frame.info)].append(frame)
    plans = []
    for key in sorted(groups, key=repr):
        by_temperature = [groups[key]] if key[0] == "flat" else _by_temperature(groups[key])
        plans += [_plan(frames_) for frames_ in by_temperature]
    order = {"bias": 0, "dark": 1, "flat": 2}
    return sorted(plans, key=lambda plan: (order[plan.kind], plan.label))


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


def _plan(frames: Sequence[CalibrationFrame]) -> MasterPlan:
    first = frames[0].info
    assert first.kind in ("bias", "dark", "flat")
    known = [frame.info.temperature_c for frame in frames if frame.info.temperature_c is not None]
    return MasterPlan(
        kind=first.kind,
        signature=Signature.of(first),
        filter_name=first.filter_name if first.kind == "flat" else "",
        band=first.band if first.kind == "flat" else None,
        exposure_s=first.exposure_s if first.kind != "bias" else None,
        temperature_c=round((min(known) + max(known)) / 2.0, 2) if known else None,
        inputs=tuple(sorted(frames, key=lambda frame: frame.id)),
    )


# ---- choose ----------------------------------------------------------------------------------------------


def choose_masters(info: FrameInfo, masters: Iterable[Master]) -> ChosenMasters:
    """The masters that suit a light (or a flat, which gets no flat).

    A dark of the same exposure is taken as it is. One of another exposure is scaled, which needs a bias; the shortest
    of the longer ones is preferred, as scaling up multiplies its noise. Without a bias a flat takes the shortest dark
    as it is. Ties go to the nearer temperature, then to more
    inputs, then to the digest: the order of ``masters`` does not matter.
    """
    own = Signature.of(info)
    ready = sorted(
        (m for m in masters if m.signature.suits(own)), key=lambda m: (_coldness(info, m), -m.n_inputs, m.digest)
    )
    cold = [m for m in ready if _coldness(info, m) <= SAME_TEMPERATURE_C]
    notes: list[str] = []
    bias = next((m for m in cold if m.kind == "bias"), None)
    if bias is None:
        notes.append("no bias frames of this camera, size, binning and temperature.")
    dark = _choose_dark(info, [m for m in cold if m.kind == "dark"], bias, notes)
    flat = None
    if info.kind != "flat":
        flat = next((m for m in ready if m.kind == "flat" and _same_filter(info, m)), None)
        if flat is None:
            notes.append(
                f"no flats in {info.band or info.filter_name or 'this filter'} of this camera, size and binning."
            )
    return ChosenMasters(bias, dark, flat, tuple(notes))


def _coldness(info: FrameInfo, master: Master) -> float:
    if info.temperature_c is None or master.temperature_c is None:
        return SAME_TEMPERATURE_C
    return abs(info.temperature_c - master.temperature_c)


def _same_filter(info: FrameInfo, master: Master) -> bool:
    return (info.band or info.filter_name) == (master.band or master.filter_name)


def same_exposure(a_s: float | None, b_s: float | None) -> bool:
    """Lengths that a dark need not be scaled between."""
    return a_s is not None and b_s is not None and abs(a_s - b_s) <= 0.005 + SAME_EXPOSURE * max(a_s, b_s)


def _choose_dark(info: FrameInfo, darks: Sequence[Master], bias: Master | None, notes: list[str]) -> Master | None:
    exact = next((m for m in darks if same_exposure(m.exposure_s, info.exposure_s)), None)
    if exact is not None:
        return exact
    usable = [m for m in darks if m.exposure_s]
    if not usable or info.exposure_s is None:
        notes.append("no dark frames of this camera, size, binning and temperature.")
        return None
    if bias is None and info.kind == "flat":
        # It carries the bias level; its dark signal is small beside a flat's light.
        chosen = min(usable, key=_length)
        notes.append(f"the dark of {chosen.exposure_s:g} s stands in for the bias.")
        return chosen
    if bias is None:
        notes.append(f"no dark of {info.exposure_s:g} s, and without bias frames another cannot be scaled.")
        return None
    longer = [m for m in usable if (m.exposure_s or 0.0) > info.exposure_s]
    chosen = min(longer, key=_length) if longer else max(usable, key=_length)
    notes.append(f"the dark of {chosen.exposure_s:g} s was scaled to {info.exposure_s:g} s.")
    return chosen


def _length(master: Master) -> float:
    return master.exposure_s or 0.0
