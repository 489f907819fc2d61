"""Points of the light curve: one a frame and one a night, each with its three errors.

``err``
    independent: photons, sky, read noise, scintillation, and what single comparison stars scatter beyond
    theirs.
``err_night``
    shared by a band and night: the zero point, the noise of the colour times the colour coefficient, what
    nightly means of comparison stars scatter (flat field, image shape) and an inexact position.
``err_band``
    shared by all nights of a band: the comparison sequence (at least `SEQUENCE_FLOOR_MAG`), the colour term
    where the target is not as red as the comparison stars, a spectrum that is no star's, and what may be left of
    the host's light. Of a limit, the last is part of the flux's error.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from reduce.almanac.times import bjd_tdb
from reduce.curve.colours import fill_colours
from reduce.curve.limits import is_detection, magnitude, magnitude_err
from reduce.curve.visits import Shot, Visit, shots_of, visits_of
from reduce.records import Choices, HostLight, HostMethod, Point, PointState, Target
from reduce.settings import Site
from reduce.standard.colour import UNKNOWN_COLOUR_ERR
from reduce.standard.solve import StandardSolution

SEQUENCE_FLOOR_MAG = 0.01
"""A comparison sequence as a whole is hardly ever better (common practice)."""
PASSBAND_ERR_MAG = {"type_ia": 0.02, "cepheid": 0.005, "rr_lyrae": 0.005, "other": 0.005}
"""Target kind → error from a passband that is not quite the standard one, after a stellar colour term."""


def make_points(
    solution: StandardSolution,
    targets: Sequence[Target],
    choices: Choices,
    site: Site | None = None,
    passband_error_mag: Mapping[str, float] | None = None,
) -> tuple[tuple[Point, ...], tuple[Point, ...]]:
    """Points of all targets, per frame and per night, ordered by target, time, band and frame.

    Parameters
    ----------
    solution
        Frames in the standard system.
    targets
        Who is followed; measurements of other names are ignored.
    choices
        Excluded points.
    site
        For barycentric times; None: as seen from the Earth's centre.
    passband_error_mag
        Band → error that replaces the default of the target's kind.
    """
    shots = shots_of(solution)
    frame_points: list[Point] = []
    night_points: list[Point] = []
    for target in targets:
        visits = visits_of([shot for shot in shots if shot.target == target.name], target.kind)
        fill_colours(visits, target.kind)
        makers = [_PointMaker(visit, target, choices, passband_error_mag or {}) for visit in visits]
        frame_points += _in_time([maker.frame(shot) for maker in makers for shot in maker.visit.shots], target, site)
        night_points += _in_time([maker.night() for maker in makers if maker.visit.chosen], target, site)
    return tuple(frame_points), tuple(night_points)


def _in_time(points: list[Point], target: Target, site: Site | None) -> list[Point]:
    """Sorted, with each point's own barycentric time."""
    ordered = sorted(points, key=lambda point: (point.mjd, point.band, point.file or "", point.zp_group))
    if not ordered:
        return []
    times = bjd_tdb(np.array([point.mjd for point in ordered]), target.ra_deg, target.dec_deg, site)
    return [replace(point, bjd_tdb=float(time)) for point, time in zip(ordered, np.atleast_1d(times), strict=True)]


class _PointMaker:
    """Points of one visit."""

    def __init__(self, visit: Visit, target: Target, choices: Choices, passband: Mapping[str, float]) -> None:
        self.visit = visit
        self.as_measured: HostMethod = "bent annulus" if target.host_arcsec is not None else "annulus"
        system, term = visit.system, visit.system.term
        self.known = bool(np.isfinite(visit.colour))
        self.colour = visit.colour if self.known else float(np.nan_to_num(term.colour_mean))
        self.excluded = (target.name, visit.night, visit.band) in choices.excluded_points
        coefficient = visit.coefficient if visit.chosen else term.term
        if self.known:
            away = self.colour - term.colour_mean if np.isfinite(term.colour_mean) else UNKNOWN_COLOUR_ERR
            colour_term_err = term.term_err * away
            self.colour_noise = abs(coefficient) * visit.colour_err
        else:
            colour_term_err = float(np.hypot(term.term_err, coefficient)) * UNKNOWN_COLOUR_ERR
            self.colour_noise = 0.0
        mismatch = passband.get(visit.band, PASSBAND_ERR_MAG[target.kind])
        sequence_err = max(system.sequence_err_mag, SEQUENCE_FLOOR_MAG)
        self.err_band = float(np.sqrt(sequence_err**2 + colour_term_err**2 + mismatch**2))

    def _err_night(self, zero_point_err: float) -> float:
        system = self.visit.system
        return float(
            np.sqrt(
                zero_point_err**2 + self.colour_noise**2 + system.position_loss_mag**2 + system.night_scatter_mag**2
            )
        )

    def _point(
        self,
        flux: float,
        flux_err: float,
        natural_flux: float,
        state: PointState,
        zero_point_err: float,
        mjd: float,
        file: str | None,
        flags: tuple[str, ...],
        n_frames: int,
        host: HostLight | None,
        common_err: float,
    ) -> Point:
        seen = is_detection(flux, float(np.hypot(flux_err, common_err)))
        if not seen:
            flux_err = float(np.hypot(flux_err, common_err))
        if not seen and state == "kept":
            state = "limit"
        if self.excluded:
            state = "excluded"
        if not self.known:
            flags = (*flags, "colour unknown")
        return Point(
            star=self.visit.target,
            file=file,
            night=self.visit.night,
            band=self.visit.band,
            mjd=mjd,
            bjd_tdb=None,
            mag=magnitude(flux) if seen else None,
            err=magnitude_err(flux, flux_err) if seen else None,
            err_night=self._err_night(zero_point_err),
            err_band=float(np.hypot(self.err_band, magnitude_err(flux, common_err))) if seen else self.err_band,
            flux=flux,
            flux_err=flux_err,
            state=state,
            flags=flags,
            host_method=host.method if host is not None else self.as_measured,
            zp_group=f"{self.visit.system.camera}/{self.visit.band}/{self.visit.night}",
            n_frames=n_frames,
            natural_mag=magnitude(natural_flux) if seen and natural_flux > 0 else None,
        )

    def frame(self, shot: Shot) -> Point:
        """Point of one frame."""
        bend = 10 ** (-0.4 * shot.frame.coefficient * self.colour)
        return self._point(
            flux=shot.flux * bend,
            flux_err=shot.whole_err * bend,
            natural_flux=shot.flux,
            state=shot.state,
            zero_point_err=shot.frame.zp_err_mag,
            mjd=shot.frame.stars.mjd,
            file=shot.frame.stars.frame,
            flags=shot.flags,
            n_frames=1,
            host=shot.host,
            common_err=shot.common_err * bend,
        )

    def night(self) -> Point:
        """Point of all chosen frames together."""
        visit = self.visit
        mean, natural = visit.mean(self.colour), visit.mean(0.0)
        zero_point_errs = np.array([shot.frame.zp_err_mag for shot in visit.chosen])
        return self._point(
            flux=mean.flux,
            flux_err=mean.flux_err,
            natural_flux=natural.flux,
            state=visit.state,
            zero_point_err=float(np.sqrt(np.sum((mean.weight * zero_point_errs) ** 2))),
            mjd=visit.mjd,
            file=None,
            flags=tuple(sorted({flag for shot in visit.chosen for flag in shot.flags})),
            n_frames=len(visit.chosen),
            host=visit.chosen[0].host,
            common_err=visit.common_err * mean.flux / natural.flux if natural.flux > 0 else visit.common_err,
        )
