"""Nights of standard stars: zero points, extinction and colour term of a camera and band, season by season.

Model, for a standard star of colour c on a frame at airmass X in night n (Hardie 1962; Landolt 1992, AJ 104, 340)::

    m_std - m_inst + k″ X c = ZP_n - k′_n X + T c + δ_s + noise

ZP_n is the night's, T the season's, δ_s a star's own offset within its published error, k″ is not fitted. k′ is the
night's own where its airmass reaches far enough; nights that stay at one height share one k′ that is held near the
other nights' mean, or near a typical value.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date

import numpy as np
from numpy.typing import NDArray

from reduce.records import LADDER_FWHM, Floats, Measured, Sequence
from reduce.settings import Settings
from reduce.standard.colour import LEAST_COLOUR_RANGE, catalogue_colour
from reduce.standard.extinction import LEAST_AIRMASS_RANGE, TYPICAL_FIRST_ORDER, above_atmosphere
from reduce.standard.frame_stars import FrameStars
from reduce.standard.outliers import WRONG_ENTRY_MAG
from reduce.standard.scatter import additive_floor

SEASON_GAP_D, SEASON_D = 60, 200
"""A longer pause begins a new season, and none is longer: mirrors age and filters change (common practice)."""
LEAST_STARS = 4
TYPICAL_FIRST_ORDER_ERR = 0.05
"""mag per airmass, how much clear nights differ from each other and from a typical value (common practice)."""
CLIP_SIGMA = 4.0
LEAST_CLIP_MAG = 0.02
LEAST_PUBLISHED_ERR_MAG = 0.001
TYPICAL_GROWTH_MAG = -0.02
"""Of a seeing image, where no frame tells; the zero point makes up for it (common practice)."""
USUAL_GROWTH_ERR_MAG = 0.005
"""Where a growth curve is borrowed from other frames (common practice)."""
MOST_AIRMASS = 2.5
"""Beyond it the Bouguer line is not straight any more (common practice)."""
CLOUD_MAG = 0.05
"""A frame of standards that is off by more than this and 4 σ was not taken under a clear sky."""
ROUNDS = 12
SECOND_RADIUS = LADDER_FWHM.index(2.0)


@dataclass(frozen=True, slots=True)
class StandardNight:
    """One night of one season."""

    night: str
    n_frames: int
    airmass_range: tuple[float, float]
    zp_mag: float
    """Above the atmosphere, at colour 0, for fluxes within 4 FWHM."""
    zp_err_mag: float
    first_order: float
    """k′, mag per airmass."""
    first_order_err: float
    first_order_is_own: bool
    """False where the night's airmass did not reach far enough and the season's k′ is used."""
    rms_mag: float
    """Scatter of its measurements about the solution."""


@dataclass(frozen=True, slots=True)
class Transformation:
    """One camera in one band over one season."""

    camera: str
    band: str
    nights: tuple[StandardNight, ...]
    term: float
    """T, with the errors of all that it was fitted with."""
    term_err: float
    term_fitted: bool
    second_order: float
    n_stars: int
    n_measurements: int
    rms_mag: float
    drift_mag_per_30_d: float
    """Of the nights' zero points; NaN with fewer than three nights."""
    drift_err_mag_per_30_d: float
    set_aside: Mapping[str, str]
    """Standard star → why it does not take part."""
    frames_set_aside: Mapping[str, str]
    """Frame → why."""


def growths(rows: Iterable[Measured]) -> dict[str, tuple[float, float]]:
    """Frame → what the light from 2 to 4 FWHM adds to a magnitude, and its error.

    A frame with too few stars for a growth curve takes the usual one of these frames, in units of their FWHM.
    """
    rows = list(rows)
    own = {
        row.frame: (float(row.growth_mag[SECOND_RADIUS]), float(row.growth_err_mag[SECOND_RADIUS]))
        for row in rows
        if np.isfinite(row.growth_mag[SECOND_RADIUS]) and np.isfinite(row.growth_err_mag[SECOND_RADIUS])
    }
    values = np.array([growth for growth, _ in own.values()] or [TYPICAL_GROWTH_MAG])
    spread = 1.4826 * float(np.median(np.abs(values - np.median(values))))
    usual = float(np.median(values)), max(spread, USUAL_GROWTH_ERR_MAG)
    return {row.frame: own.get(row.frame, usual) for row in rows}


def solve_transformations(
    frames: Iterable[tuple[Measured, FrameStars]], standards: Sequence, settings: Settings
) -> tuple[Transformation, ...]:
    """Transformations of every camera, band and season; frames of unknown or large airmass are left out.

    Parameters
    ----------
    frames
        Measured frames of standard fields, and their standards in the order of ``standards``.
    settings
        Second-order extinction.
    """
    groups: dict[tuple[str, str], list[tuple[Measured, FrameStars]]] = {}
    for measured, frame in sorted(frames, key=lambda pair: (pair[1].mjd, pair[1].frame)):
        if frame.quality.airmass is not None and frame.quality.airmass <= MOST_AIRMASS:
            groups.setdefault(frame.group, []).append((measured, frame))
    found = []
    for camera, band in sorted(groups):
        second = settings.photometry.second_order_extinction.get(band, 0.0)
        group = groups[camera, band]
        for season in seasons({frame.night for _, frame in group}):
            members = [pair for pair in group if pair[1].night in season]
            solved = _Season(camera, band, members, standards, second).solve()
            if solved is not None:
                found.append(solved)
    return tuple(found)


def seasons(nights: Iterable[str]) -> list[set[str]]:
    """Nights (ISO dates) parted where the pause is long, or the season would be."""
    found: list[set[str]] = []
    first = last = 0
    for night in sorted(nights):
        day = date.fromisoformat(night).toordinal()
        if not found or day - last > SEASON_GAP_D or day - first > SEASON_D:
            found.append(set())
            first = day
        found[-1].add(night)
        last = day
    return found


class _Season:
    """The standards of one camera, band and season while they are being solved; N measurements."""

    def __init__(
        self,
        camera: str,
        band: str,
        members: list[tuple[Measured, FrameStars]],
        standards: Sequence,
        second_order: float,
    ) -> None:
        self.camera, self.band, self.standards, self.second_order = camera, band, standards, second_order
        self.frames = [frame for _, frame in members]
        nothing = np.full(len(standards), np.nan)
        catalogue = np.asarray(standards.mag.get(band, nothing), dtype=float)
        catalogue_err = np.asarray(standards.mag_err.get(band, nothing), dtype=float)
        colour = catalogue_colour(standards, band)
        growth = growths(measured for measured, _ in members)
        adds = np.array([growth[frame.frame] for frame in self.frames]).reshape(-1, 2, 1)
        shape = (len(members), len(standards))
        mag = np.array([frame.mag[:, SECOND_RADIUS] for frame in self.frames]).reshape(shape) + adds[:, 0]
        err = np.array([frame.mag_err[:, SECOND_RADIUS] for frame in self.frames]).reshape(shape)
        err = np.hypot(err, adds[:, 1])
        usable = np.isfinite(mag) & np.isfinite(err) & np.isfinite(catalogue) & np.isfinite(colour)
        self.frame, self.star = np.nonzero(usable)
        self.airmass = np.array([float(frame.quality.airmass or 1.0) for frame in self.frames])[self.frame]
        self.night_names = sorted({frame.night for frame in self.frames})
        self.night = np.array([self.night_names.index(frame.night) for frame in self.frames])[self.frame]
        self.colour = colour[self.star]
        outside = above_atmosphere(mag[usable], 0.0, self.airmass, second_order, self.colour)
        self.y = np.asarray(catalogue[self.star] - outside, dtype=float)
        self.variance = err[usable] ** 2
        self.stars = np.unique(self.star)
        stated = np.maximum(np.nan_to_num(catalogue_err[self.stars]), LEAST_PUBLISHED_ERR_MAG)
        self.published_variance = stated**2
        self.column_of_star = np.searchsorted(self.stars, self.star)

    def solve(self) -> Transformation | None:
        """None where nothing was measured."""
        if len(self.y) == 0:
            return None
        keep = np.ones(len(self.y), bool)
        stars_aside: dict[int, str] = {}
        frames_aside: dict[int, str] = {}
        floor = 0.0
        for _ in range(ROUNDS):
            fit = self._fit(keep, floor)
            residual = fit.residual
            stars_aside |= self._wrong_stars(residual + fit.offset, keep, floor)
            frames_aside |= self._clouded_frames(residual, keep, floor)
            standing = ~np.isin(self.star, list(stars_aside)) & ~np.isin(self.frame, list(frames_aside))
            sigma = np.sqrt(self.variance + floor**2)
            new = standing & (np.abs(residual) < np.maximum(CLIP_SIGMA * sigma, LEAST_CLIP_MAG))
            if new.sum() < LEAST_STARS or np.array_equal(new, keep):
                break
            keep = new
            dof = max(int(keep.sum()) - fit.n_free, 1)
            floor = additive_floor(residual[keep], np.sqrt(self.variance)[keep], dof)
        fit = self._fit(keep, floor)
        return self._conclude(fit, keep, stars_aside, frames_aside)

    # ---- least squares -----------------------------------------------------------------------------------

    def _fit(self, keep: NDArray[np.bool_], floor: float) -> _Fit:
        """Twice where some nights need the others' extinction: the wide nights alone first."""
        wide = self._wide_nights(keep)
        typical = TYPICAL_FIRST_ORDER.get(self.band, 0.2)
        prior, prior_err = typical, TYPICAL_FIRST_ORDER_ERR
        if wide and len(wide) < len(self.night_names):
            alone = self._least_squares(keep & np.isin(self.night, wide), floor, wide, prior, prior_err)
            own = [-alone.unknown[alone.slope_of[night]] for night in wide]
            prior = float(np.mean(own))
            prior_err = float(np.std(own, ddof=1)) if len(own) > 2 else TYPICAL_FIRST_ORDER_ERR / 2
        return self._least_squares(keep, floor, wide, prior, max(prior_err, 0.005))

    def _wide_nights(self, keep: NDArray[np.bool_]) -> list[int]:
        found = []
        for night in range(len(self.night_names)):
            airmass = self.airmass[keep & (self.night == night)]
            if len(airmass) and np.ptp(airmass) >= LEAST_AIRMASS_RANGE:
                found.append(night)
        return found

    def _least_squares(
        self, keep: NDArray[np.bool_], floor: float, wide: list[int], prior: float, prior_err: float
    ) -> _Fit:
        """Columns: zero points, slopes of wide nights, the shared slope, stars, colour term; robust (Cauchy)."""
        n_nights = len(self.night_names)
        slope_of = {night: n_nights + (wide.index(night) if night in wide else len(wide)) for night in range(n_nights)}
        shared = n_nights + len(wide)
        n_columns = shared + 1 + len(self.stars) + 1
        design = np.zeros((len(self.y), n_columns))
        rows = np.arange(len(self.y))
        design[rows, self.night] = 1.0
        design[rows, [slope_of[int(night)] for night in self.night]] = self.airmass
        design[rows, shared + 1 + self.column_of_star] = 1.0
        design[:, -1] = self.colour
        fit_term = self._can_fit_term(keep)
        # What no measurement reaches is held too, so that the matrix has an inverse.
        held = np.zeros(n_columns)
        centre = np.zeros(n_columns)
        held[shared], centre[shared] = prior_err**-2, -prior
        held[shared + 1 : -1] = 1.0 / self.published_variance
        held[:n_nights][np.bincount(self.night[keep], minlength=n_nights) == 0] = 1.0
        held[-1] = 1e-12 if fit_term else 1e12
        sigma2 = self.variance + floor**2
        robust = np.ones(len(self.y))
        unknown = centre
        for _ in range(20):
            weight = np.where(keep, robust / sigma2, 0.0)
            matrix = np.einsum("n,ni,nj->ij", weight, design, design) + np.diag(held)
            right = np.einsum("n,ni,n->i", weight, design, self.y) + held * centre
            new = np.linalg.solve(matrix, right)
            settled = np.allclose(new, unknown, rtol=0, atol=1e-7)
            unknown = new
            if settled:
                break
            pull = (self.y - design @ unknown) / np.sqrt(sigma2)
            robust = 1.0 / (1.0 + (pull / 2.385) ** 2)
        weight = np.where(keep, 1 / sigma2, 0.0)
        covariance = np.linalg.inv(np.einsum("n,ni,nj->ij", weight, design, design) + np.diag(held))
        n_free = len(np.unique(self.night[keep])) + len(wide) + len(np.unique(self.star[keep]))
        residual = self.y - np.einsum("ni,i->n", design, unknown)
        offset = unknown[shared + 1 + self.column_of_star]
        return _Fit(unknown, np.sqrt(np.diag(covariance)), residual, offset, slope_of, n_free, fit_term, wide)

    def _can_fit_term(self, keep: NDArray[np.bool_]) -> bool:
        colours = self.colour[keep]
        return len(np.unique(self.star[keep])) >= LEAST_STARS and float(np.ptp(colours)) > LEAST_COLOUR_RANGE

    # ---- what does not fit -------------------------------------------------------------------------------

    def _wrong_stars(self, residual: Floats, keep: NDArray[np.bool_], floor: float) -> dict[int, str]:
        """At most one a round, the worst: it bends the others' residuals."""
        worst, worst_ratio, why = -1, 0.0, ""
        stars = np.unique(self.star[keep])
        if len(stars) <= LEAST_STARS:
            return {}
        for star in stars:
            these = keep & (self.star == star)
            middle = float(np.median(residual[these]))
            published = self.published_variance[self.column_of_star[these][0]]
            err = float(np.sqrt(np.mean(self.variance[these] + floor**2) / these.sum() + published))
            if abs(middle) >= WRONG_ENTRY_MAG and abs(middle) > max(CLIP_SIGMA * err, worst_ratio * err):
                worst, worst_ratio = int(star), abs(middle) / err
                why = f"measured {abs(middle):.2f} mag {'brighter' if middle > 0 else 'fainter'} than published"
        return {worst: why} if worst >= 0 else {}

    def _clouded_frames(self, residual: Floats, keep: NDArray[np.bool_], floor: float) -> dict[int, str]:
        found = {}
        for frame in np.unique(self.frame[keep]):
            these = keep & (self.frame == frame)
            middle = float(np.median(residual[these]))
            err = float(np.sqrt(np.mean(self.variance[these] + floor**2) / these.sum()))
            if abs(middle) > max(CLOUD_MAG, CLIP_SIGMA * err):
                found[int(frame)] = f"cloud or haze: {abs(middle):.2f} mag off the night's zero point"
        return found

    # ---- result ------------------------------------------------------------------------------------------

    def _conclude(
        self, fit: _Fit, keep: NDArray[np.bool_], stars_aside: dict[int, str], frames_aside: dict[int, str]
    ) -> Transformation:
        residual, errors = fit.residual, fit.errors
        nights = []
        for n, name in enumerate(self.night_names):
            these = keep & (self.night == n)
            if not these.any():
                continue
            slope = fit.slope_of[n]
            low, high = float(self.airmass[these].min()), float(self.airmass[these].max())
            nights.append(StandardNight(
                night=name, n_frames=len(np.unique(self.frame[these])), airmass_range=(low, high),
                zp_mag=float(fit.unknown[n]), zp_err_mag=float(errors[n]),
                first_order=float(-fit.unknown[slope]), first_order_err=float(errors[slope]),
                first_order_is_own=n in fit.wide, rms_mag=float(np.sqrt(np.mean(residual[these] ** 2))),
            ))  # fmt: skip
        drift, drift_err = _drift(nights)
        return Transformation(
            camera=self.camera,
            band=self.band,
            nights=tuple(nights),
            term=float(fit.unknown[-1]),
            term_err=float(errors[-1]) if fit.term_fitted else float("nan"),
            term_fitted=fit.term_fitted,
            second_order=self.second_order,
            n_stars=len(np.unique(self.star[keep])),
            n_measurements=int(keep.sum()),
            rms_mag=float(np.sqrt(np.mean(residual[keep] ** 2))) if keep.any() else float("nan"),
            drift_mag_per_30_d=drift,
            drift_err_mag_per_30_d=drift_err,
            set_aside={self.standards.ids[star]: why for star, why in sorted(stars_aside.items())},
            frames_set_aside={self.frames[frame].frame: why for frame, why in sorted(frames_aside.items())},
        )


@dataclass(frozen=True, slots=True)
class _Fit:
    unknown: Floats
    errors: Floats
    residual: Floats
    """(N,) catalogue - solution."""
    offset: Floats
    """(N,) the measured star's own, which is taken out of ``residual``."""
    slope_of: dict[int, int]
    """Night → column of its extinction."""
    n_free: int
    term_fitted: bool
    wide: list[int]


def _drift(nights: list[StandardNight]) -> tuple[float, float]:
    """Slope of the zero points at airmass 1 in time, mag per 30 days, with the scatter of the nights as its error."""
    if len(nights) < 3:
        return float("nan"), float("nan")
    day = np.array([date.fromisoformat(night.night).toordinal() for night in nights], dtype=float)
    level = np.array([night.zp_mag - night.first_order for night in nights])
    t = (day - day.mean()) / 30.0
    spread = float(np.sum(t**2))
    slope = float(np.sum(t * level)) / spread
    rest = level - level.mean() - slope * t
    return slope, float(np.sqrt(np.sum(rest**2) / (len(nights) - 2) / spread))
