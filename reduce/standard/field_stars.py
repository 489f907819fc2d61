"""Mean standard magnitudes of every star of the field, from all frames that something has calibrated.

What calibrates a frame is either the comparison sequence (its zero point in the joint solution) or a night of standard
stars (its zero point above the atmosphere, extinction and colour term).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.almanac.times import night_of
from reduce.field.sequence import cross_match
from reduce.records import COLOUR_OF_BAND, PSF_COLUMN, Floats, Measured, StarFlag
from reduce.settings import Settings
from reduce.standard.colour import colour_coefficient, solve_colour
from reduce.standard.frame_stars import LEAST_ERR_MAG, LEAST_SNR, MATCH_RADIUS_ARCSEC, MATCH_RADIUS_PX, SPOILED
from reduce.standard.solve import StandardSolution
from reduce.standard.transformation import SECOND_RADIUS, Transformation, growths

CLIP_SIGMA = 4.0
UNSTEADY_MAG = 0.03
"""A frame that is off by more from the others of clear nights saw a cloud (common practice)."""
LEAST_MEASUREMENTS = 3
"""Fewer frames in a band say nothing about a star's constancy."""


@dataclass(frozen=True, slots=True)
class CalibratedFrame:
    """One frame with all that leads from its fluxes to standard magnitudes."""

    measured: Measured
    band: str
    night: str
    column: int
    """Index into the aperture ladder, or PSF_COLUMN."""
    zp_mag: float
    """At colour 0, for ``column``."""
    zp_err_mag: float
    """The frame's own."""
    coefficient: float
    """T - k″ X."""


@dataclass(frozen=True, slots=True)
class FieldStars:
    """Stars of one field, S in all; magnitudes are NaN where a star's colour or the band is unknown."""

    ra_deg: Floats
    dec_deg: Floats
    mag: Mapping[str, Floats]
    err: Mapping[str, Floats]
    """Of the mean, without what all stars of the band share."""
    rms: Mapping[str, Floats]
    """Scatter about the mean, from frame to frame."""
    expected_rms: Mapping[str, Floats]
    """What photons and zero points let expect."""
    n_frames: Mapping[str, NDArray[np.int64]]
    crowded: NDArray[np.bool_]
    """Has a neighbour within the aperture on most frames."""

    def __len__(self) -> int:
        return len(self.ra_deg)

    @property
    def bands(self) -> tuple[str, ...]:
        """Bands with any magnitude."""
        return tuple(self.mag)


def frames_by_sequence(
    rows: Iterable[Measured], solution: StandardSolution, nights: frozenset[str] = frozenset()
) -> list[CalibratedFrame]:
    """Kept frames that the comparison sequence calibrates; of all nights when none is named."""
    by_id = {row.frame: row for row in rows}
    return [
        CalibratedFrame(
            by_id[solved.stars.frame], system.band, solved.stars.night, system.radius, solved.zp_mag,
            solved.zp_err_mag, solved.coefficient,
        )
        for system in solution.systems
        for solved in system.frames
        if solved.verdict.state == "kept" and solved.stars.frame in by_id
        and (not nights or solved.stars.night in nights)
    ]  # fmt: skip


def frames_by_standards(
    rows: Iterable[Measured],
    transformations: Iterable[Transformation],
    settings: Settings,
    nights: frozenset[str] = frozenset(),
) -> list[CalibratedFrame]:
    """Frames of nights that standards calibrate: ``zp = ZP - k′ X``, for all the light within 4 FWHM.

    A frame needs an airmass.
    """
    rows = list(rows)
    groups: dict[tuple[str, str | None], list[Measured]] = {}
    for row in rows:
        if row.info is not None:
            groups.setdefault((row.info.camera, row.info.band), []).append(row)
    growth_of = {frame: found for members in groups.values() for frame, found in growths(members).items()}
    known = {(t.camera, t.band, night.night): (t, night) for t in transformations for night in t.nights}
    longitude = settings.site.longitude_deg if settings.site is not None else None
    found = []
    for row in rows:
        if row.info is None or row.info.band is None or row.info.mjd_mid is None or row.quality is None:
            continue
        night = night_of(row.info.mjd_mid, longitude)
        key = (row.info.camera, row.info.band, night)
        airmass = row.quality.airmass
        if key not in known or airmass is None or (nights and night not in nights):
            continue
        growth, growth_err = growth_of[row.frame]
        solved, its_night = known[key]
        zp = its_night.zp_mag - its_night.first_order * airmass + growth
        coefficient = colour_coefficient(solved.term, solved.second_order, airmass)
        err = float(np.hypot(growth_err, its_night.rms_mag / np.sqrt(max(solved.n_stars, 1))))
        found.append(CalibratedFrame(row, row.info.band, night, SECOND_RADIUS, zp, err, coefficient))
    return found


def steady(frames: Iterable[CalibratedFrame]) -> list[CalibratedFrame]:
    """Frames of which nothing but their own night took light away: not fainter or brighter than the others of a band.

    What calibrates a night of standards knows nothing of a cloud over the target's field.
    """
    ordered = sorted(frames, key=lambda f: (-len(f.measured.stars), f.measured.frame))
    _, _, index = _catalogue(ordered)
    n_stars = 1 + max((int(where.max(initial=-1)) for where in index), default=-1)
    found = []
    for band in sorted({frame.band for frame in ordered}):
        mine = [(frame, where) for frame, where in zip(ordered, index, strict=True) if frame.band == band]
        mag = np.full((len(mine), n_stars), np.nan)
        for k, (frame, where) in enumerate(mine):
            mag[k, where] = _instrumental(_field_rows(frame.measured), frame)[0] + frame.zp_mag
        about_star = mag - _column_median(mag)
        level = _column_median(about_star.T)
        away = np.abs(level - (np.nanmedian(level) if np.isfinite(level).any() else 0.0))
        found += [frame for (frame, _), far in zip(mine, away, strict=True) if far <= UNSTEADY_MAG]
    return found


def mean_stars(frames: Iterable[CalibratedFrame]) -> FieldStars:
    """Stars of all frames, found again by position, and their mean magnitudes band by band."""
    ordered = sorted(frames, key=lambda f: (-len(f.measured.stars), f.measured.frame))
    ra, dec, index = _catalogue(ordered)
    bands = sorted({frame.band for frame in ordered}, key=list(COLOUR_OF_BAND).index)
    natural: dict[str, Floats] = {}
    coefficient: dict[str, Floats] = {}
    err: dict[str, Floats] = {}
    rms: dict[str, Floats] = {}
    expected: dict[str, Floats] = {}
    count: dict[str, NDArray[np.int64]] = {}
    times_crowded, times_seen = np.zeros(len(ra)), np.zeros(len(ra))
    for band in bands:
        mine = [(frame, where) for frame, where in zip(ordered, index, strict=True) if frame.band == band]
        mag, sigma, factor = (np.full((len(mine), len(ra)), np.nan) for _ in range(3))
        for k, (frame, where) in enumerate(mine):
            rows = _field_rows(frame.measured)
            m, e, crowded = _instrumental(rows, frame)
            mag[k, where], sigma[k, where], factor[k, where] = (
                m + frame.zp_mag,
                np.hypot(e, frame.zp_err_mag),
                frame.coefficient,
            )
            times_crowded[where] += crowded
            times_seen[where] += 1
        natural[band], coefficient[band], err[band], rms[band], expected[band], count[band] = _mean(mag, sigma, factor)
    standard = _standard(natural, coefficient)
    return FieldStars(
        ra, dec, standard, err, rms, expected, count, times_crowded > 0.5 * np.maximum(times_seen, 1)
    )  # fmt: skip


def _field_rows(measured: Measured) -> NDArray[Any]:
    rows: NDArray[Any] = measured.stars[measured.stars["role"] == 0]
    return rows


def _catalogue(frames: list[CalibratedFrame]) -> tuple[Floats, Floats, list[NDArray[np.int64]]]:
    """Positions of all stars, and for every frame the star of each of its rows."""
    ra, dec = np.zeros(0), np.zeros(0)
    found = []
    for frame in frames:
        rows = _field_rows(frame.measured)
        scale = frame.measured.solution.scale_arcsec if frame.measured.solution is not None else 0.0
        radius = max(MATCH_RADIUS_ARCSEC, MATCH_RADIUS_PX * scale)
        where = cross_match(rows["ra_deg"], rows["dec_deg"], ra, dec, radius)
        back = cross_match(ra, dec, rows["ra_deg"], rows["dec_deg"], radius)
        taken = where >= 0
        taken[taken] = back[where[taken]] == np.flatnonzero(taken)
        new = ~taken
        where = np.where(taken, where, 0)
        where[new] = len(ra) + np.arange(int(new.sum()))
        ra, dec = np.concatenate([ra, rows["ra_deg"][new]]), np.concatenate([dec, rows["dec_deg"][new]])
        found.append(where.astype(np.int64))
    return ra, dec, found


def _instrumental(rows: NDArray[Any], frame: CalibratedFrame) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Magnitudes of e-/s with errors, NaN where spoiled or faint; and who has a neighbour in the aperture."""
    info, quality = frame.measured.info, frame.measured.quality
    assert info is not None
    assert info.exposure_s is not None
    assert quality is not None
    if frame.column == PSF_COLUMN:
        flux, flux_err, flags = rows["psf_flux_e"], rows["psf_flux_err_e"], rows["psf_flags"]
    else:
        flux, flux_err, flags = (rows[name][:, frame.column] for name in ("flux_e", "flux_err_e", "flags"))
    good = np.isfinite(flux) & (flux_err > 0) & (flux > LEAST_SNR * flux_err) & (flags & int(SPOILED) == 0)
    positive = np.where(good, flux, 1.0)
    mag = np.where(good, -2.5 * np.log10(positive / info.exposure_s), np.nan)
    err = 2.5 / np.log(10) * np.hypot(flux_err / positive, quality.scintillation)
    return mag, np.where(good, np.maximum(err, LEAST_ERR_MAG), np.nan), flags & int(StarFlag.CROWDED) != 0


def _mean(
    mag: Floats, sigma: Floats, coefficient: Floats
) -> tuple[Floats, Floats, Floats, Floats, Floats, NDArray[np.int64]]:
    """Mean natural magnitude and coefficient of every star, with error, scatter, expected scatter and frames."""
    seen = np.isfinite(mag) & np.isfinite(sigma)
    median = _column_median(np.where(seen, mag, np.nan))
    spread = 1.4826 * _column_median(np.where(seen, np.abs(mag - median), np.nan))
    seen &= np.nan_to_num(np.abs(mag - median)) <= CLIP_SIGMA * np.maximum(np.nan_to_num(sigma), np.nan_to_num(spread))
    weight = np.where(seen, np.where(seen, sigma, 1.0) ** -2, 0.0)
    total, n = weight.sum(axis=0), seen.sum(axis=0)
    safe = np.where(total > 0, total, 1.0)
    mean = np.where(total > 0, (weight * np.where(seen, mag, 0.0)).sum(axis=0) / safe, np.nan)
    factor = (weight * np.where(seen, coefficient, 0.0)).sum(axis=0) / safe
    rest = np.where(seen, mag - mean, 0.0)
    dof = np.maximum(n - 1, 1)
    chi2 = (weight * rest**2).sum(axis=0) / dof
    err = np.where(total > 0, np.sqrt(np.maximum(chi2, 1.0) / safe), np.nan)
    rms = np.where(n > 1, np.sqrt((rest**2).sum(axis=0) / dof), np.nan)
    expected = np.where(n > 0, np.sqrt(np.where(seen, sigma**2, 0.0).sum(axis=0) / np.maximum(n, 1)), np.nan)
    return mean, factor, err, rms, expected, n.astype(np.int64)


def _column_median(values: Floats) -> Floats:
    median = np.full(values.shape[1], np.nan)
    some = np.isfinite(values).any(axis=0)
    if some.any():
        median[some] = np.nanmedian(values[:, some], axis=0)
    return median


def _standard(natural: Mapping[str, Floats], coefficient: Mapping[str, Floats]) -> dict[str, Floats]:
    """Standard magnitudes of stars of which the colour of each band is measured too.

    Bands that share a colour are solved as a pair; the others (``m = natural + C (m_V - m)`` and the like) then
    follow from the pair's. A band whose colour cannot be had stays NaN.
    """
    standard: dict[str, Floats] = {}
    pairs = {
        COLOUR_OF_BAND[band] for band in natural if COLOUR_OF_BAND[COLOUR_OF_BAND[band][0]] == COLOUR_OF_BAND[band]
    }
    for blue, red in sorted(pairs):
        if blue in natural and red in natural and COLOUR_OF_BAND[red] == (blue, red):
            colours = [
                solve_colour(float(b), float(r), float(cb), float(cr))
                for b, r, cb, cr in zip(
                    natural[blue], natural[red], coefficient[blue], coefficient[red], strict=True
                )
            ]  # fmt: skip
            colour = np.array(colours)
            standard[blue] = natural[blue] + coefficient[blue] * colour
            standard[red] = natural[red] + coefficient[red] * colour
    for band in natural:
        if band in standard:
            continue
        blue, red = COLOUR_OF_BAND[band]
        if red == band and blue in standard:
            standard[band] = (natural[band] + coefficient[band] * standard[blue]) / (1.0 + coefficient[band])
        else:
            standard[band] = np.full(len(natural[band]), np.nan)
    return {band: standard[band] for band in natural}
