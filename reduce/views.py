"""What the faces show: one immutable picture of a campaign, made in the worker, drawn by app and commands."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from reduce.records import (
    ColourTerm,
    Estimate,
    FieldSolution,
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
    """measured, no match, unreadable, waiting, calibration, not used (another file of the exposure stands for it)."""
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
    notes: tuple[str, ...] = ()
    """What was guessed, scaled or left out when it was read and calibrated."""
    growth_mag: tuple[float, ...] = ()
    """Aperture corrections at records.LADDER_FWHM."""
    peak_adu: float | None = None
    """Highest raw pixel of the targets."""
    limit_adu: float | None = None
    """Where the response stops being linear, or saturation where only that is known."""
    of_standards: bool = False
    """Shows a field of standard stars, not the targets'."""
    solution: FieldSolution | None = None
    """Where its pixels lie on the sky: lays one frame over another."""


@dataclass(frozen=True, slots=True)
class StarReading:
    """One measured star of a frame, as the measurement stands in the logbook."""

    name: str
    """Of a target or comparison star; empty: another star."""
    is_target: bool
    x_px: float
    y_px: float
    mag: float | None
    """With the frame's zero point, colour term left out; None: no zero point, or no light."""
    mag_err: float | None
    """Of photons, sky and read-out."""
    snr: float | None
    peak_adu: float | None
    """Highest raw pixel within 1.5 FWHM."""
    fwhm_arcsec: float | None
    elongation: float | None
    flags: tuple[str, ...]
    growth_mag: tuple[float, ...]
    """Light within records.LADDER_FWHM against the largest of them, in magnitudes; NaN where not measured."""


@dataclass(frozen=True, slots=True)
class RadialProfile:
    """The light of a star against the distance from its centre, in raw counts above the sky about it."""

    radius_px: tuple[float, ...]
    """Of each pixel."""
    light_adu: tuple[float, ...]
    ring_px: tuple[float, ...]
    """Middle of each ring of one pixel."""
    ring_adu: tuple[float, ...]
    """Median of the ring."""


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
class FilterRow:
    """A filter as headers name it, and what it is taken for."""

    name: str
    band: str | None
    n_frames: int
    named: bool
    """The observer said so, in the settings."""


@dataclass(frozen=True, slots=True)
class SetupView:
    """What the observer set up."""

    settings: Mapping[str, str] = field(default_factory=dict)
    """Key of observatory.toml, as in ``site.latitude_deg`` → its value as it would be typed; "" or absent: not set."""
    frames_folder: str = ""
    trouble: str = ""
    """One sentence: the settings file cannot be used, or the frames folder is gone."""
    filters: tuple[FilterRow, ...] = ()
    sequence: str = ""
    sequence_notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ObjectRow:
    """What frames call their object, and where they point."""

    name: str
    n_frames: int
    ra_deg: float | None
    dec_deg: float | None


@dataclass(frozen=True, slots=True)
class FolderSurvey:
    """What lies in a folder of frames, by the headers alone."""

    folder: str
    kinds: Mapping[str, int]
    """light, bias, dark, flat, unknown → number of files."""
    cameras: tuple[str, ...]
    """One phrase each: name, size, scale, gain as headers state them."""
    filters: tuple[FilterRow, ...]
    """Of lights and flats."""
    objects: tuple[ObjectRow, ...]
    """Of lights, the most frequent first."""
    nights: tuple[str, ...]
    """Dates of the first and the last frame."""
    missing: tuple[str, ...]
    """One sentence on each thing that is not there or not stated."""
    unusable: tuple[str, ...]
    """File: reason, of each that cannot be read."""


@dataclass(frozen=True, slots=True)
class BandProgress:
    """What a night has gathered of a target in one band."""

    band: str
    n_frames: int
    """Kept ones."""
    snr: float
    """Signal-to-noise of them together, weighted by their errors."""
    goal: float

    @property
    def enough(self) -> bool:
        """The goal is reached."""
        return self.snr >= self.goal


@dataclass(frozen=True, slots=True)
class AfterSlew:
    """What the newest frame says of the pointing and of the time still needed."""

    frame: str
    file: str
    """Escaped."""
    target: str
    """The target on it; empty when there is none."""
    band: str | None
    outcome: str
    reason: str
    """Why it was not recognised."""
    offset_arcmin: float | None
    rotation_deg: float | None
    peak_adu: float | None
    """Highest raw pixel of the target."""
    limit_adu: float | None
    """Where the response stops being linear, or saturation where only that is known."""
    too_bright: bool
    bands: tuple[BandProgress, ...]
    """Bands in which the target is observed, as far as they got this night."""
    advice: str
    """A few words: go on, change filter, expose shorter …"""


@dataclass(frozen=True, slots=True)
class Alert:
    """Something of this night that an observer wants to be told of at once."""

    id: str
    """Never given twice: what happened to which frame."""
    kind: Literal["dropped", "cloud", "focus", "low", "saturated"]
    sentence: str


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
    setup: SetupView = SetupView()
    after_slew: AfterSlew | None = None
    """Of the newest frame; None before the first."""
    alerts: tuple[Alert, ...] = ()
    """Of the newest night, oldest first."""


# ---- plans -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class TargetNight:
    """One target on one night."""

    altitude_deg: tuple[float, ...]
    """At the times of the plan."""
    window: tuple[float, float] | None
    """MJD between which it can be observed: dark, high enough, far enough from the Moon; None: not this night."""
    why_not: str
    """Why there is no window; empty when there is one."""
    transit_mjd: float
    least_airmass: float | None
    """Within the window."""
    moon_separation_deg: float
    """At transit."""
    sun_separation_deg: float
    due: str
    """"due: last point 3.1 d ago" and the like."""
    is_due: bool


@dataclass(frozen=True, slots=True)
class Advice:
    """One exposure that is worth its time, or would be on another night."""

    night: str
    mjd: float
    """When best."""
    band: str
    n: int
    exposure_s: float
    """Of one frame."""
    snr: float
    """Expected of all frames together."""
    airmass: float
    minutes: float
    """Exposure, read-out, filter and its share of the slew."""
    mu_err: float | None
    """Expected error of μ after it and everything ranked before it; None where the kind has no such forecast."""
    reason: str


@dataclass(frozen=True, slots=True)
class TargetPlan:
    """A target's night and what to do in it."""

    target: Target
    night: TargetNight
    sentence: str
    """What the advice comes to, or "nothing useful tonight" and why."""
    tonight: tuple[Advice, ...] = ()
    """Most useful first."""
    later: tuple[Advice, ...] = ()
    """What the coming nights would add after it, by time."""
    candidates: tuple[Advice, ...] = ()
    """Exposures of tonight and later, each as if it were the only one, most for its time first."""
    warnings: tuple[str, ...] = ()
    """Usual exposures that would saturate the target, one sentence a band."""


@dataclass(frozen=True, slots=True)
class Plan:
    """The night ahead (or running) for all targets."""

    night: str
    now_mjd: float
    mjd: tuple[float, ...]
    sun_altitude_deg: tuple[float, ...]
    moon_altitude_deg: tuple[float, ...]
    moon_illumination: float
    twilight: tuple[tuple[str, float, float], ...]
    """(name, MJD of its end in the evening, MJD of its begin in the morning)."""
    targets: tuple[TargetPlan, ...]
    cautions: tuple[str, ...] = ()
    """Of safety."""
    notes: tuple[str, ...] = ()
    """What the plan rests on and what it lacks."""
