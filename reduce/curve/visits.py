"""What the frames of one night say about one target in one camera and band, before the colour is known."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np

from reduce.curve.combine import Combined, combine, expected_errors
from reduce.curve.limits import MAG_PER_RELATIVE_FLUX, is_detection, magnitude, magnitude_err
from reduce.records import (
    FLUX_ZERO_POINT,
    PSF_COLUMN,
    Floats,
    HostLight,
    HostMethod,
    PointState,
    StarFlag,
    TargetKind,
)
from reduce.standard.solve import BandSystem, SolvedFrame, StandardSolution

COMBINE_WITHIN_D: dict[TargetKind, float] = {"type_ia": 1.0, "cepheid": 0.02, "rr_lyrae": 0.004, "other": 1.0}
"""Frames within this span make one point: a night, or 2 % of a short period (1 d and 0.2 d)."""

_FLAG_WORDS = {
    StarFlag.SATURATED: "saturated", StarFlag.BAD_PIXEL: "bad pixel", StarFlag.EDGE: "edge",
    StarFlag.CROWDED: "crowded", StarFlag.COSMIC_RAY: "cosmic ray", StarFlag.NON_LINEAR: "non-linear",
    StarFlag.TRAIL: "satellite trail", StarFlag.RESIDUAL_IMAGE: "residual image",
}  # fmt: skip
_SURER: tuple[HostMethod, ...] = ("annulus", "bent annulus", "mirrored", "reference")
_DROPPING = StarFlag.SATURATED | StarFlag.EDGE | StarFlag.TRAIL
_DOUBTING = StarFlag.BAD_PIXEL | StarFlag.COSMIC_RAY | StarFlag.NON_LINEAR | StarFlag.RESIDUAL_IMAGE


@dataclass(frozen=True, slots=True)
class Shot:
    """One target on one frame."""

    target: str
    system: BandSystem
    frame: SolvedFrame
    flux: float
    """Natural system, zero point 25."""
    flux_err: float
    """Photons, sky and read noise."""
    photons_per_flux: float
    relative_err: float
    """Scintillation and the scatter of single stars, as a fraction of the flux."""
    state: PointState
    """kept, doubtful or dropped."""
    flags: tuple[str, ...]
    host: HostLight | None = None
    """How it was freed of its host's light; None: as measured on the frame."""
    common_err: float = 0.0
    """Error from the host's light that all frames of the band share."""

    @property
    def whole_err(self) -> float:
        """Independent error of the flux."""
        return float(np.hypot(self.flux_err, self.relative_err * max(self.flux, 0.0)))


@dataclass(slots=True)
class Visit:
    """Frames of one target, camera, band and night that make one point; `curve.colours` fills the colour."""

    target: str
    system: BandSystem
    night: str
    shots: tuple[Shot, ...]
    """All, by time."""
    chosen: tuple[Shot, ...]
    """Those that make the point: the kept ones, else the doubtful ones; may be empty."""
    state: PointState
    colour: float = field(default=float("nan"))
    """Standard colour of the target for this band; NaN: unknown."""
    colour_err: float = field(default=float("nan"))

    @property
    def band(self) -> str:
        """Band letter."""
        return self.system.band

    def mean(self, colour: float) -> Combined:
        """Combined flux of the chosen shots in the standard system for this colour (0: natural system)."""
        bend = 10 ** (-0.4 * self._array("coefficient") * colour)
        flux = np.array([shot.flux for shot in self.chosen]) * bend
        flux_err = np.array([shot.flux_err for shot in self.chosen]) * bend
        photons = np.array([shot.photons_per_flux for shot in self.chosen]) / bend
        relative = np.array([shot.relative_err for shot in self.chosen])
        return combine(flux, expected_errors(flux, flux_err, photons, relative))

    def _array(self, name: str) -> Floats:
        return np.array([getattr(shot.frame, name) for shot in self.chosen], dtype=float)

    @property
    def weight(self) -> Floats:
        """(n,) of the chosen shots, sums to 1."""
        return self.mean(0.0).weight

    @property
    def common_err(self) -> float:
        """Error of the mean flux (natural system) from the host's light, shared by all nights."""
        return float(np.sum(self.weight * np.array([shot.common_err for shot in self.chosen])))

    @property
    def mjd(self) -> float:
        """Weighted mid-time."""
        return float(np.sum(self.weight * np.array([shot.frame.stars.mjd for shot in self.chosen])))

    @property
    def coefficient(self) -> float:
        """Weighted T - k″ X."""
        return float(np.sum(self.weight * self._array("coefficient")))

    @property
    def natural(self) -> tuple[float, float]:
        """Natural magnitude and independent error; NaN below the detection limit."""
        mean = self.mean(0.0)
        if not is_detection(mean.flux, mean.flux_err):
            return float("nan"), float("nan")
        return magnitude(mean.flux), magnitude_err(mean.flux, mean.flux_err)


def shots_of(solution: StandardSolution) -> list[Shot]:
    """Every target on every frame that has a zero point."""
    return [
        _shot(name, row, system, frame)
        for system in solution.systems
        for frame in system.frames
        for row, name in enumerate(frame.stars.target_names)
        if np.isfinite(frame.stars.target_flux_e[row, system.radius])
        and frame.stars.target_flux_err_e[row, system.radius] > 0
    ]


def _shot(name: str, row: int, system: BandSystem, frame: SolvedFrame) -> Shot:
    stars = frame.stars
    zp_mag = frame.zp_mag + float(frame.target_shift_mag[row])
    per_electron = 10 ** (-0.4 * (zp_mag - FLUX_ZERO_POINT)) / stars.exposure_s
    host = stars.target_host[row] if stars.target_host else None
    if host is not None and host.method == "bent annulus" and system.radius != PSF_COLUMN:
        host = None  # its error was found for the PSF alone
    bits = StarFlag(int(stars.target_flags[row, system.radius]))
    state: PointState = frame.verdict.state
    if bits & _DROPPING:
        state = "dropped"
    elif bits & _DOUBTING and state == "kept" and not frame.verdict.by_person:
        state = "doubtful"
    return Shot(
        target=name,
        system=system,
        frame=frame,
        flux=float(stars.target_flux_e[row, system.radius]) * per_electron,
        flux_err=float(stars.target_flux_err_e[row, system.radius]) * per_electron,
        photons_per_flux=1.0 / per_electron,
        relative_err=_relative_err(row, system, frame),
        state=state,
        flags=tuple(word for flag, word in _FLAG_WORDS.items() if bits & flag),
        host=host,
        common_err=host.common_err_e * per_electron if host is not None else 0.0,
    )


def _relative_err(row: int, system: BandSystem, frame: SolvedFrame) -> float:
    """Scintillation, what single stars scatter (of all frames, or more of this one), and the plane of the frame."""
    scatter = max(system.frame_scatter_mag, frame.scatter_mag)
    mag = np.hypot(scatter, float(frame.target_shift_err_mag[row]))
    return float(np.hypot(frame.stars.quality.scintillation, mag / MAG_PER_RELATIVE_FLUX))


def visits_of(shots: Iterable[Shot], kind: TargetKind) -> list[Visit]:
    """Group the shots of one target by camera, band, night and, for short periods, time."""
    groups: dict[tuple[str, str], list[Shot]] = {}
    for shot in sorted(shots, key=lambda shot: (shot.frame.stars.mjd, shot.frame.stars.frame)):
        groups.setdefault((shot.frame.stars.zp_group, shot.target), []).append(shot)
    visits = []
    for key in sorted(groups):
        members: list[Shot] = []
        for shot in groups[key]:
            if members and shot.frame.stars.mjd - members[0].frame.stars.mjd > COMBINE_WITHIN_D[kind]:
                visits.append(_visit(members))
                members = []
            members.append(shot)
        visits.append(_visit(members))
    return visits


def _of_one_method(shots: list[Shot]) -> tuple[Shot, ...]:
    """Those freed of the host in the surest way: a mean of two ways would be off by part of the host."""
    ranks = [_SURER.index(shot.host.method) if shot.host is not None else 0 for shot in shots]
    return tuple(shot for shot, rank in zip(shots, ranks, strict=True) if rank == max(ranks))


def _visit(shots: list[Shot]) -> Visit:
    chosen: tuple[Shot, ...] = ()
    state: PointState = "dropped"
    candidates: tuple[PointState, ...] = ("kept", "doubtful")
    for wanted in candidates:
        chosen = _of_one_method([shot for shot in shots if shot.state == wanted])
        if chosen:
            state = wanted
            break
    first = shots[0]
    return Visit(first.target, first.system, first.frame.stars.night, tuple(shots), chosen, state)
