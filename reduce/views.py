"""What the faces show: one immutable picture of a campaign, made in the worker, drawn by app and commands."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from reduce.records import (
    ColourTerm,
    Estimate,
    FrameState,
    FrameZeroPoint,
    Point,
    StarResult,
    Target,
)

StepState = Literal["done", "wants you", "waiting"]
STEPS = ("Frames", "Calibration", "Field", "Photometry", "Light curve", "Distance")


@dataclass(frozen=True, slots=True)
class Step:
    """One step of a target's way from frames to distance."""

    name: str
    state: StepState
    detail: str
    """What was done or what is missing, in a few words."""


@dataclass(frozen=True, slots=True)
class FrameRow:
    """One frame as tables show it."""

    id: str
    """SHA-256 of the file; of a file that cannot be read (kind "unknown"), its path."""
    file: str
    """Name without folder, escaped."""
    path: str
    kind: str
    band: str | None
    mjd: float | None
    night: str
    exposure_s: float | None
    outcome: str
    """measured, no match, unreadable, waiting, calibration."""
    state: FrameState | None
    reason: str
    provisional: bool
    by_person: bool
    targets: tuple[str, ...] = ()
    airmass: float | None = None
    fwhm_arcsec: float | None = None
    elongation: float | None = None
    sky_e_px: float | None = None
    n_stars: int | None = None
    peak_fraction: float | None = None
    """Highest target pixel over the saturation level."""
    snr: Mapping[str, float] = field(default_factory=dict)
    """Target → signal-to-noise on this frame."""
    offset_arcmin: float | None = None
    """Field centre against the nearest target."""
    rotation_deg: float | None = None
    scale_arcsec: float | None = None
    zero_point: FrameZeroPoint | None = None
    pixel: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    """Target and comparison star ids → pixel position on this frame."""
    growth_mag: tuple[float, ...] = ()
    """Aperture corrections at records.LADDER_FWHM."""


@dataclass(frozen=True, slots=True)
class EstimateRow:
    """One stored estimate of the running history."""

    made_at: str
    """UTC, ISO."""
    mu: float | None
    mu_err: float | None
    t_max: float | None
    dm15: float | None
    e_host: float | None
    chi2: float | None
    n: int
    why: str
    """What changed it: first estimate, new night, dropped frame, excluded point, undo …"""


@dataclass(frozen=True, slots=True)
class LogRow:
    """One line of the observing log: a note, a decision or an event."""

    id: str
    at: str
    who: str
    target: str
    night: str
    kind: str
    body: str


@dataclass(frozen=True, slots=True)
class TargetView:
    """Everything about one target."""

    target: Target
    steps: tuple[Step, ...]
    next_sentence: str
    """What wants doing next."""
    estimate: Estimate | None
    night_points: tuple[Point, ...]
    frame_points: tuple[Point, ...]
    history: tuple[EstimateRow, ...]
    next_screen: str = ""
    """The screen where it is done; the app adds the key."""


@dataclass(frozen=True, slots=True)
class SequenceStar:
    """One comparison star with its catalogue magnitudes."""

    id: str
    ra_deg: float
    dec_deg: float
    mag: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The whole campaign at one moment; the app never holds anything else."""

    folder: str
    observatory: str
    stamp: int
    """Grows with every change of the logbook."""
    targets: tuple[TargetView, ...]
    frames: tuple[FrameRow, ...]
    """By time; calibration frames included."""
    calibration: tuple[str, ...]
    """One sentence per group of masters, and per missing one."""
    colour_terms: tuple[ColourTerm, ...]
    stars: tuple[StarResult, ...]
    sequence: tuple[SequenceStar, ...]
    log: tuple[LogRow, ...]
    """Newest last."""
    can_undo: str = ""
    """The decision that undo would take back, in words; empty when there is none."""
    notes: tuple[str, ...] = ()
