"""Master bias, dark, flat and shutter map: what they are, and which suit a frame; nothing is read here.

A master's digest names its kind, its input frames and the masters used to make it: it never changes once it stands and
is the same, byte for byte, whoever builds it. `master_plans` says which frames make one.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np

from reduce.frames.detector_check import DetectorMeasure
from reduce.records import FrameInfo

MasterKind = Literal["bias", "dark", "flat", "shutter", "fringe"]

MASTER_VERSION = 2
"""Raise it when the same inputs would give other pixels."""
SAME_TEMPERATURE_C = 2.0
SAME_EXPOSURE = 0.005
"""Fraction by which exposures of "the same length" may differ, plus 5 ms."""
ENOUGH_TO_CHOOSE = 5
"""Frames of a master from which the nearer in time is better than one of more frames (common practice)."""
SHORT_LIGHT_S, SHORTEST_LIGHT_S = 30.0, 3.0
"""Below these a shutter of some hundredths of a second is seen, and may spoil a magnitude (common practice)."""


@dataclass(frozen=True, slots=True)
class Signature:
    """What calibration frames and a light must have in common."""

    camera: str
    nx: int
    ny: int
    binning: tuple[int, int]
    gain_e_per_adu: float | None
    window: tuple[int, int] | None = None
    """Where on the detector the image begins, as binned, if it is known."""
    overscan: bool = False
    """The overscan is subtracted: the level of the bias is gone."""

    @classmethod
    def of(cls, info: FrameInfo) -> Signature:
        """Of one frame."""
        return cls(
            info.camera, info.nx, info.ny, info.binning, info.gain_e_per_adu, info.window, info.overscan
        )  # fmt: skip

    def suits(self, other: Signature) -> bool:
        """Whether a master of this kind of frame can serve another: the same detector read out in the same way.

        A gain that one side does not state is no obstacle. A subframe is served by a master that covers it, when both
        say where on the detector they lie.
        """
        return self.differs(other) == ""

    def differs(self, other: Signature) -> str:
        """What keeps a master of this kind of frame from serving another, '' when nothing does."""
        gains = self.gain_e_per_adu, other.gain_e_per_adu
        if self.camera != other.camera:
            return "camera"
        if self.binning != other.binning:
            return "binning"
        if None not in gains and gains[0] != gains[1]:
            return "gain"
        if self.overscan != other.overscan:
            return "overscan"
        return "" if self.offset(other) is not None else "size"

    def offset(self, other: Signature) -> tuple[int, int] | None:
        """Column and row of this image where another begins, None when it is not covered."""
        same_size = (self.nx, self.ny) == (other.nx, other.ny)
        if self.window is None or other.window is None:
            return (0, 0) if same_size else None
        x, y = other.window[0] - self.window[0], other.window[1] - self.window[1]
        inside = 0 <= x <= self.nx - other.nx and 0 <= y <= self.ny - other.ny
        return (x, y) if inside else None


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
    mjd: float | None = None
    """Middle of the inputs' times."""

    @property
    def label(self) -> str:
        """What a person calls it."""
        what = {
            "bias": "bias",
            "dark": f"dark {self.exposure_s:g} s" if self.exposure_s is not None else "dark",
            "flat": f"flat {self.band or self.filter_name}",
            "shutter": "shutter map",
            "fringe": f"fringes {self.band}",
        }[self.kind]
        by_temperature = self.kind in ("bias", "dark")
        cold = f", {self.temperature_c:.0f} °C" if self.temperature_c is not None and by_temperature else ""
        one = self.signature
        gain = f", gain {one.gain_e_per_adu:g}" if one.gain_e_per_adu is not None else ""
        size = f"{one.nx}×{one.ny}, binning {one.binning[0]}×{one.binning[1]}{gain}"
        day = f", {iso_day(self.mjd)}" if self.mjd is not None else ""
        return f"{what} ({one.camera or 'camera not named'}, {size}{cold}{day})"

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
    mjd: float | None = None
    """Middle of the inputs' times."""
    detector: DetectorMeasure | None = None
    """What flats say of the detector."""


@dataclass(frozen=True, slots=True)
class ChosenMasters:
    """What suits one frame; None where nothing does, with the reason in ``notes``."""

    bias: Master | None = None
    dark: Master | None = None
    flat: Master | None = None
    notes: tuple[str, ...] = ()
    shutter: Master | None = None
    """Of a short exposure."""
    other_dark: Master | None = None
    """Of another exposure than the dark that is to be scaled: it shows whether the dark does scale."""
    fringe: Master | None = None

    def digests(self) -> list[str | None]:
        """Of bias, dark, flat, shutter map, the second dark, and fringes."""
        all_ = (self.bias, self.dark, self.flat, self.shutter, self.other_dark, self.fringe)
        return [master.digest if master is not None else None for master in all_]


def iso_day(mjd: float) -> str:
    """Day of a time in UTC: ``2024-03-11``."""
    return str(np.datetime64("1858-11-17") + np.timedelta64(math.floor(mjd), "D"))


# ---- choose ----------------------------------------------------------------------------------------------


def choose_masters(info: FrameInfo, masters: Iterable[Master]) -> ChosenMasters:
    """The masters that suit a light (or a flat, which gets no flat, but a shutter map whatever its exposure).

    Of masters with enough frames (`ENOUGH_TO_CHOOSE`) the nearest in time is taken, of others the one with most. A dark
    of the same exposure is taken as it is. One of another exposure is scaled, which needs a bias; the shortest of the
    longer ones is preferred, as scaling up multiplies its noise. Without a bias a flat takes the shortest dark as it
    is. A frame with a pedestal was freed of its bias already and gets neither bias nor dark. The order of ``masters``
    does not matter.
    """
    own = Signature.of(info)
    masters = list(masters)
    ready = sorted((m for m in masters if m.signature.suits(own)), key=lambda m: _rank(info, m))
    cold = [m for m in ready if _coldness(info, m) <= SAME_TEMPERATURE_C]
    notes: list[str] = []
    bias = dark = other = None
    if info.pedestal_adu is None:
        bias = next((m for m in cold if m.kind == "bias"), None)
        if bias is None:
            notes.append("no bias frames of this camera, size, binning and temperature" + _why(own, "bias", masters))
        darks = [m for m in cold if m.kind == "dark"]
        dark = _choose_dark(info, darks, bias, notes)
        if dark is not None and bias is not None and not same_exposure(dark.exposure_s, info.exposure_s):
            others = [m for m in darks if m.exposure_s and not same_exposure(m.exposure_s, dark.exposure_s)]
            other = max(others, key=_length, default=None)
    flat, shutter = None, _choose_shutter(info, ready, notes)
    if info.kind != "flat":
        of_filter = [m for m in masters if m.kind == "flat" and _same_filter(info, m)]
        flat = next((m for m in ready if m in of_filter), None)
        if flat is None:
            name = info.band or info.filter_name or "this filter"
            notes.append(f"no flats in {name} of this camera, size and binning" + _why(own, "flat", of_filter))
    fringe = next((m for m in ready if m.kind == "fringe" and _same_filter(info, m) and info.kind == "light"), None)
    return ChosenMasters(bias, dark, flat, tuple(notes), shutter, other, fringe)


def _rank(info: FrameInfo, master: Master) -> tuple[float, float, float, float, int, str]:
    """Small is better: enough frames, the same whole degree, near in time; then the rest, so that no two are equal."""
    enough = min(master.n_inputs, ENOUGH_TO_CHOOSE)
    far_d = 0.0 if info.mjd_mid is None or master.mjd is None else abs(info.mjd_mid - master.mjd)
    warm_c = _coldness(info, master) if master.kind in ("bias", "dark") else 0.0
    return -enough, round(warm_c), far_d, warm_c, -master.n_inputs, master.digest


def _why(own: Signature, kind: MasterKind, masters: Iterable[Master]) -> str:
    """What those that stand lack, behind a sentence."""
    reasons = {m.signature.differs(own): m.signature for m in masters if m.kind == kind}
    if "binning" in reasons:
        x, y = reasons["binning"].binning
        return f"; those there are have binning {x}×{y}."
    if "overscan" in reasons:
        return f"; those there are have {'an' if reasons['overscan'].overscan else 'no'} overscan."
    return "."


def _choose_shutter(info: FrameInfo, ready: Sequence[Master], notes: list[str]) -> Master | None:
    shutter = next((m for m in ready if m.kind == "shutter"), None)
    if info.kind == "flat":
        return shutter  # a master's flats may be short and long
    if not info.exposure_s or info.exposure_s > SHORT_LIGHT_S:
        return None
    if shutter is None and info.exposure_s < SHORTEST_LIGHT_S:
        notes.append(
            f"exposed for {info.exposure_s:g} s only: the shutter's own time is not corrected without flats of "
            "short and of long exposure."
        )
    return shutter


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
