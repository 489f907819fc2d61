"""From measured frames to verdicts, zero points and colour terms: all that stands before the light curve."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from reduce.almanac.times import night_of
from reduce.records import (
    Choices,
    ColourTerm,
    Floats,
    FrameVerdict,
    FrameZeroPoint,
    Measured,
    Sequence,
    StarResult,
)
from reduce.settings import Settings
from reduce.standard import verdict as judge
from reduce.standard.aperture import best_radius, nearest_radius, position_err_fwhm, position_loss_mag, radius_fwhm
from reduce.standard.colour import ADOPTED_TERM_ERR, can_fit_term, catalogue_colour, colour_coefficient
from reduce.standard.extinction import above_atmosphere, fit_extinction
from reduce.standard.findings import look_at_images, look_at_zero_points
from reduce.standard.frame_stars import FrameStars, frame_stars
from reduce.standard.position import no_planes, season_planes, sides, with_frame_planes
from reduce.standard.residual_images import mark_residual_images
from reduce.standard.scatter import repeatability
from reduce.standard.wheel import wheel_slips
from reduce.standard.zeropoint import JointSolution, solve_zero_points

STAR_BY_PERSON = "set aside by a person"


@dataclass(frozen=True, slots=True)
class SolvedFrame:
    """One frame with its place in the standard system."""

    stars: FrameStars
    zp_mag: float
    """At colour 0."""
    zp_err_mag: float
    """The frame's own, without what all frames share."""
    coefficient: float
    """T - k″ X: what a standard colour is multiplied by."""
    verdict: FrameVerdict
    scatter_mag: float
    """What single stars of this frame scatter beyond their photons, as patchy cloud makes them."""
    star_shift_mag: Floats
    """(n_stars,) to add to the zero point at each star's place on the frame."""
    target_shift_mag: Floats
    """(n_targets,)."""
    target_shift_err_mag: Floats
    """(n_targets,)."""


@dataclass(frozen=True, slots=True)
class BandSystem:
    """One camera in one band."""

    camera: str
    band: str
    radius: int
    """Index into LADDER_FWHM, or PSF_COLUMN."""
    term: ColourTerm
    sequence_err_mag: float
    """Error of the comparison sequence at the colour ``term.colour_mean``, shared by all frames."""
    frame_scatter_mag: float
    """What one star scatters beyond its photons from frame to frame of a night (`scatter.repeatability`)."""
    night_scatter_mag: float
    """What the nightly mean of one star scatters beyond that."""
    position_loss_mag: float
    frames: tuple[SolvedFrame, ...]
    """By time; frames without a zero point are left out."""


@dataclass(frozen=True, slots=True)
class StandardSolution:
    """All frames in the standard system."""

    systems: tuple[BandSystem, ...]
    verdicts: Mapping[str, FrameVerdict]
    zero_points: Mapping[str, FrameZeroPoint]
    stars: tuple[StarResult, ...]
    notes: tuple[str, ...]

    @property
    def colour_terms(self) -> tuple[ColourTerm, ...]:
        """One per camera and band."""
        return tuple(system.term for system in self.systems)


def solve_standard(
    measured: Iterable[Measured],
    sequence: Sequence,
    choices: Choices,
    settings: Settings,
    known_terms: Mapping[tuple[str, str], tuple[float, float]] = MappingProxyType({}),
) -> StandardSolution:
    """Verdicts, zero points, colour terms and star results of all frames.

    The order of ``measured`` does not matter, to the last bit.

    Parameters
    ----------
    measured
        One row a frame, whatever its outcome.
    sequence
        Comparison stars.
    choices, settings
        What people decided, and the observatory's colour terms and second-order extinction.
    known_terms
        Camera, band → colour term and its error, from nights of standard stars: adopted where the comparison stars
        cannot give one and the settings name none.
    """
    rows = mark_residual_images(sorted(measured, key=lambda row: row.frame))
    longitude = settings.site.longitude_deg if settings.site is not None else None
    groups: dict[tuple[str, str], list[FrameStars]] = {}
    verdicts: dict[str, FrameVerdict] = {}
    for row in rows:
        if row.outcome != "measured":
            verdicts[row.frame] = judge.verdict_without_measurement(row, choices)
            continue
        assert row.info is not None
        assert row.info.mjd_mid is not None
        frame = frame_stars(row, sequence, night_of(row.info.mjd_mid, longitude))
        groups.setdefault(frame.group, []).append(frame)
    systems: list[BandSystem] = []
    zero_points: dict[str, FrameZeroPoint] = {}
    notes: list[str] = []
    results: dict[tuple[str, str], StarResult] = {}
    slips: dict[str, str] = {}
    for camera in sorted({camera for camera, _ in groups}):
        mine = [frame for key in sorted(groups) if key[0] == camera for frame in groups[key]]
        slips |= wheel_slips(mine, sequence)
    for camera, band in sorted(groups):
        frames = sorted(groups[camera, band], key=lambda frame: (frame.mjd, frame.frame))
        group = _Group(camera, band, frames, sequence, choices, settings, known_terms.get((camera, band)), slips)
        system, joint = group.solve()
        systems.append(system)
        verdicts |= group.verdicts
        zero_points |= group.zero_points(joint, system)
        notes += [*group.extinction_notes(joint), *group.position_notes()]
        for result in group.star_results(joint):
            before = results.get((result.band, result.star))
            if before is None or result.n_frames > before.n_frames:
                results[result.band, result.star] = result
    return StandardSolution(tuple(systems), verdicts, zero_points, tuple(results.values()), tuple(notes))


class _Group:
    """The frames of one camera and band while they are being solved."""

    def __init__(
        self,
        camera: str,
        band: str,
        frames: list[FrameStars],
        sequence: Sequence,
        choices: Choices,
        settings: Settings,
        known_term: tuple[float, float] | None = None,
        slips: Mapping[str, str] = MappingProxyType({}),
    ) -> None:
        self.slips = slips
        self.camera, self.band, self.frames, self.sequence, self.choices = (
            camera,
            band,
            frames,
            sequence,
            choices,
        )
        asked = choices.aperture_fwhm.get(band, settings.photometry.aperture_fwhm.get(band))
        self.radius = best_radius(frames) if asked is None else nearest_radius(asked)
        self.adopted_term, self.adopted_term_err = 0.0, ADOPTED_TERM_ERR
        if band in settings.photometry.colour_terms:
            self.adopted_term = settings.photometry.colour_terms[band]
        elif known_term is not None:
            self.adopted_term, self.adopted_term_err = known_term
        self.second_order = {
            **settings.photometry.second_order_extinction,
            **choices.second_order_extinction,
        }.get(band, 0.0)
        self.airmass = np.array([np.nan if f.quality.airmass is None else f.quality.airmass for f in frames])
        self.planes = no_planes(len(frames))
        self.verdicts: dict[str, FrameVerdict] = {}
        self.speaking = np.ones(len(frames), bool)
        """Frames that say something about the stars: the kept ones, where there are any."""
        self._take_stars()

    def _take_stars(self) -> None:
        """Columns of the solution: stars with a magnitude, and a colour where the sequence has any."""
        nothing = np.full(len(self.sequence), np.nan)
        self.catalogue = np.asarray(self.sequence.mag.get(self.band, nothing), dtype=float)
        catalogue_err = np.asarray(self.sequence.mag_err.get(self.band, nothing), dtype=float)
        self.catalogue_err = np.where(np.isfinite(catalogue_err), catalogue_err, 0.02)  # common practice
        colour = catalogue_colour(self.sequence, self.band)
        with_colour = np.isfinite(self.catalogue) & np.isfinite(colour)
        self.colour_known = int(with_colour.sum()) >= judge.LEAST_STARS
        self.colour = colour if self.colour_known else np.zeros(len(self.sequence))
        shape = (len(self.frames), len(self.sequence))
        self.mag = np.array([frame.mag[:, self.radius] for frame in self.frames]).reshape(shape)
        self.mag_err = np.array([frame.mag_err[:, self.radius] for frame in self.frames]).reshape(shape)
        usable = with_colour if self.colour_known else np.isfinite(self.catalogue)
        self.columns = np.flatnonzero(usable & np.isfinite(self.mag).any(axis=0))
        self.place = np.array([frame.place for frame in self.frames]).reshape(*shape, 2)

    def solve(self) -> tuple[BandSystem, JointSolution]:
        """Solve, judge, and solve again with only the kept frames speaking for stars and colour term."""
        looks = look_at_images(self.frames, self.radius, self.slips)
        first = [judge.verdict(f.frame, look, self.choices) for f, look in zip(self.frames, looks, strict=True)]
        informs = np.array([verdict.state == "kept" for verdict in first])
        if not informs.any():
            informs = np.array([verdict.state != "dropped" for verdict in first])
        joint = self._level(informs)
        whole = np.array([all(state != "dropped" for state, _ in look) for look in looks])
        expected = self._expected_rms(joint)
        skies = look_at_zero_points(self.frames, self.band, joint, expected, self.planes, whole)
        for frame, look, sky in zip(self.frames, looks, skies, strict=True):
            self.verdicts[frame.frame] = judge.verdict(frame.frame, look + sky, self.choices)
        states = np.array([self.verdicts[frame.frame].state for frame in self.frames])
        now = states == "kept" if (states == "kept").any() else states != "dropped"
        if not np.array_equal(now, informs):
            joint = self._joint(now)
        self.speaking = now
        return self._system(joint, now), joint

    def _level(self, informs: NDArray[np.bool_]) -> JointSolution:
        """Solution with the planes that the residuals demand: of the season first, then of single frames."""
        joint, place = self._joint(informs), self.place[:, self.columns]
        side = sides(
            np.array([frame.rotation_deg for frame in self.frames]),
            np.array([frame.mirrored for frame in self.frames]),
        )
        self.planes = season_planes(
            self._offsets(), self.mag_err[:, self.columns], self.catalogue_err[self.columns],
            self.colour[self.columns], joint, informs, place, side,
        )  # fmt: skip
        if not self.planes.flat:
            joint = self._joint(informs)
        before = self.planes
        err = np.hypot(self.mag_err[:, self.columns], joint.star_scatter_mag)
        standing = np.isfinite(joint.residual)
        standing[:, list(joint.set_aside)] = False
        self.planes = with_frame_planes(before, joint.residual - joint.star_offset_mag, err, standing, place)
        return self._joint(informs) if self.planes.of_frame_mag.any() else joint

    def _offsets(self) -> Floats:
        """(F, columns) catalogue - instrumental magnitude, freed of the second-order extinction and of the planes."""
        columns = self.columns
        airmass = np.nan_to_num(self.airmass, nan=0.0)
        second = self.second_order if self.colour_known else 0.0
        # The zero point keeps the first order; the second order of each star's colour is taken off here.
        mag = above_atmosphere(self.mag[:, columns], 0.0, airmass[:, None], second, self.colour[columns])
        offsets: Floats = self.catalogue[columns] - mag
        return offsets if self.planes.flat else offsets - self.planes.at(self.place[:, columns])

    def _joint(self, informs: NDArray[np.bool_]) -> JointSolution:
        columns = self.columns
        fit = self.colour_known and can_fit_term(self.colour[columns])
        by_person = {
            k: STAR_BY_PERSON
            for k, star in enumerate(columns)
            if self.sequence.ids[star] in self.choices.stars_set_aside
        }
        return solve_zero_points(
            self._offsets(),
            self.mag_err[:, columns],
            self.catalogue_err[columns],
            self.colour[columns],
            informs,
            term=None if fit else self.adopted_term if self.colour_known else 0.0,
            term_err=self.adopted_term_err,
            set_aside=by_person,
        )

    def _expected_rms(self, joint: JointSolution) -> Floats:
        """(F,) star-to-star scatter that photons, stars and catalogue allow."""
        variance = self.mag_err[:, self.columns] ** 2 + joint.star_scatter_mag**2
        alone = len(self.frames) < 3  # then a star's own offset cannot be told from its scatter
        variance = variance + (self.catalogue_err[self.columns] ** 2 if alone else 0.0)
        return np.array(
            [np.sqrt(np.median(row[np.isfinite(row)])) if np.isfinite(row).any() else 0 for row in variance]
        )

    def _system(self, joint: JointSolution, informs: NDArray[np.bool_]) -> BandSystem:
        used = joint.used & informs[:, None]
        deviation = np.where(used, joint.residual - joint.star_offset_mag, np.nan)
        nights = np.unique([frame.night for frame in self.frames], return_inverse=True)[1]
        frame_scatter, night_scatter = repeatability(deviation, self.mag_err[:, self.columns], nights)
        second = self.second_order if self.colour_known else 0.0
        expected = self._expected_rms(joint)
        solved = []
        for k, frame in enumerate(self.frames):
            if np.isfinite(joint.zp_mag[k]):
                coefficient = colour_coefficient(joint.term, second, frame.quality.airmass)
                zp, err = float(joint.zp_mag[k]), float(joint.zp_err_mag[k])
                stars = frame.place[self.columns[joint.used[k]]]
                # The median deviation sees all stars of a patchy frame, σ_frame only those that were not rejected.
                patchy = joint.frame_scatter_mag[k] > 0
                excess = max(float(joint.rms_mag[k]) ** 2 - expected[k] ** 2, 0.0) ** 0.5 if patchy else 0.0
                solved.append(
                    SolvedFrame(
                        stars=frame,
                        zp_mag=zp,
                        zp_err_mag=err,
                        coefficient=coefficient,
                        verdict=self.verdicts[frame.frame],
                        scatter_mag=max(float(joint.frame_scatter_mag[k]), excess),
                        star_shift_mag=np.nan_to_num(frame.place) @ self.planes.slope_mag[k],
                        target_shift_mag=frame.target_place @ self.planes.slope_mag[k],
                        target_shift_err_mag=self.planes.err_at(k, frame.target_place, stars),
                    )
                )
        term = ColourTerm(
            camera=self.camera,
            band=self.band,
            term=joint.term,
            term_err=joint.term_err,
            colour_mean=joint.pivot_colour if self.colour_known else float("nan"),
            n_stars=int(used.any(axis=0).sum()),
            fitted=joint.term_fitted,
        )
        return BandSystem(
            camera=self.camera,
            band=self.band,
            radius=self.radius,
            term=term,
            sequence_err_mag=joint.sequence_err_mag,
            frame_scatter_mag=frame_scatter,
            night_scatter_mag=night_scatter,
            position_loss_mag=position_loss_mag(radius_fwhm(self.radius), position_err_fwhm(self.frames)),
            frames=tuple(solved),
        )

    def zero_points(self, joint: JointSolution, system: BandSystem) -> dict[str, FrameZeroPoint]:
        """Frame → its zero point, with the whole error."""
        return {
            frame.frame: FrameZeroPoint(
                frame=frame.frame,
                band=self.band,
                zp_mag=float(joint.zp_mag[k]),
                zp_err_mag=float(np.hypot(joint.zp_err_mag[k], system.sequence_err_mag)),
                n_stars=int(joint.n_stars[k]),
                chi2_dof=float(joint.chi2_dof[k]),
                rms_mag=float(joint.rms_mag[k]),
                slope_diagnostic=float(joint.slope[k]),
                aperture_fwhm=radius_fwhm(self.radius),
            )
            for k, frame in enumerate(self.frames)
            if np.isfinite(joint.zp_mag[k])
        }

    def star_results(self, joint: JointSolution) -> list[StarResult]:
        """One row a star that has a catalogue magnitude in this band."""
        column = {int(star): k for k, star in enumerate(self.columns)}
        saturated = np.array([frame.saturated for frame in self.frames]).reshape(len(self.frames), -1)
        rows = []
        for star in np.flatnonzero(np.isfinite(self.catalogue)):
            k = column.get(int(star))
            # A clouded frame has a zero point of its own, but says nothing about its stars.
            used = joint.used[:, k] & self.speaking if k is not None else np.zeros(len(self.frames), bool)
            n = int(used.sum())
            aside = joint.set_aside.get(k) if k is not None else None
            residual = np.zeros(0) if k is None else joint.residual[:, k][used | ((aside is not None) & self.speaking)]
            measured = residual[np.isfinite(residual)]
            if aside is not None:
                word, reason = "set aside", aside
            elif n:
                word, reason = "used", ""
            elif self.colour_known and not np.isfinite(self.colour[star]):
                word, reason = "spare", "the catalogue has no colour for it"
            elif saturated[:, star].any():
                word, reason = "spare", "saturated"
            else:
                word, reason = "spare", "not measured, too faint or disturbed on every frame"
            rows.append(
                StarResult(
                    star=self.sequence.ids[star],
                    band=self.band,
                    word=word,  # type: ignore[arg-type]
                    reason=reason,
                    catalogue_mag=float(self.catalogue[star]),
                    residual_mag=float(joint.star_offset_mag[k]) if k is not None else float("nan"),
                    rms_mag=float(np.std(measured, ddof=1)) if len(measured) > 1 else float("nan"),
                    n_frames=len(measured),
                    colour=float(self.colour[star]) if self.colour_known else float("nan"),
                )
            )
        return rows

    def position_notes(self) -> list[str]:
        """Planes of the season, in words."""
        if not self.planes.season:
            return []
        return [f"{self.camera}, {self.band}: the zero point changes over the frame ({self.planes.season})."]

    def extinction_notes(self, joint: JointSolution) -> list[str]:
        """k′ of the nights whose airmass reaches far enough, in words."""
        notes = []
        good = np.array([self.verdicts[frame.frame].state == "kept" for frame in self.frames])
        for night in sorted({frame.night for frame in self.frames}):
            these = good & np.array([frame.night == night for frame in self.frames])
            found = fit_extinction(self.airmass[these], joint.zp_mag[these], joint.zp_err_mag[these])
            if found is not None:
                k, k_err = found.first_order, found.first_order_err
                notes.append(f"Night {night}, {self.band}: extinction {k:.2f} ± {k_err:.2f} mag per airmass.")
        return notes
