"""The two halves of the job: ``measure_frame`` (pixels end here) and ``solve`` (again whenever a choice changes)."""

from __future__ import annotations

import hashlib
import json
import time
from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.almanac.airmass import airmass
from reduce.almanac.sky import sun_altitude
from reduce.almanac.times import bjd_tdb
from reduce.curve.comparison import star_points
from reduce.curve.nights import make_points
from reduce.field.match import FieldHint, FieldMatch, match_field
from reduce.field.wcs import pixel_to_sky, sky_to_pixel
from reduce.frames.calibrate import calibrate
from reduce.frames.master_sets import ChosenMasters
from reduce.frames.reader import open_frame
from reduce.measure.aperture import measure_stars
from reduce.measure.backdrop import backdrop
from reduce.measure.growth import growth_curve
from reduce.measure.noise import scintillation
from reduce.measure.psf import frame_psf
from reduce.measure.psf_flux import measure_psf
from reduce.measure.stamps import pack
from reduce.measure.trails import find_trails, mark_trails
from reduce.records import (
    CalibratedImage,
    Choices,
    Detections,
    FieldSolution,
    FrameError,
    FrameInfo,
    Image,
    Measured,
    Quality,
    Sequence,
    Solution,
    Target,
)
from reduce.settings import Settings
from reduce.standard.solve import StandardSolution, solve_standard
from reduce.stars.centroid import centroid
from reduce.stars.detect import detect
from reduce.stars.width import frame_fwhm

MEASURE_VERSION = 2
"""Raise it when the same pixels would give other numbers: every frame is then measured again beside its old row."""

SAME_SCALE = 0.02
"""Relative; a camera's scale from one frame to another, with focus and temperature."""
MOST_STARS = 500
MOST_SATURATED = 20
LEAST_STAR_SNR = 10.0
CLOSEST_TO_EDGE_FWHM = 2.0


@dataclass(frozen=True, slots=True)
class KnownCamera:
    """What the first recognised frame of a camera says of it; makes fields of few stars recognisable."""

    scale_arcsec: float
    mirrored: bool


@dataclass(frozen=True, slots=True)
class Recipe:
    """How the pixels of one frame are treated; two recipes with one digest give the same numbers."""

    settings: Settings
    masters: ChosenMasters
    targets: tuple[Target, ...]
    astrometric: Sequence
    """Stars with known positions to find the field by; may be more than the comparison sequence."""
    camera: KnownCamera | None = None
    """Only of a frame that was not recognised without."""

    def digest(self) -> str:
        """SHA-256 of everything that decides the numbers."""
        return hashlib.sha256(json.dumps(self.content(), sort_keys=True).encode()).hexdigest()

    def content(self) -> dict[str, Any]:
        """Everything that decides the numbers, as plain data."""
        stars = hashlib.sha256()
        for array in (self.astrometric.ra_deg, self.astrometric.dec_deg, _ranking_mag(self.astrometric)):
            stars.update(np.ascontiguousarray(array, dtype="<f8").tobytes())
        camera = {} if self.camera is None else {"camera": [self.camera.scale_arcsec, self.camera.mirrored]}
        return {
            **camera,
            "version": MEASURE_VERSION,
            "settings": self.settings.model_dump(include={"site", "telescope", "camera", "filters"}, mode="json"),
            "masters": self.masters.digests(),
            "targets": [[target.name, target.ra_deg, target.dec_deg, target.host_arcsec] for target in self.targets],
            "astrometric": stars.hexdigest(),
        }


def _ranking_mag(stars: Sequence) -> NDArray[np.float64]:
    """One magnitude a star to rank by: the median over its bands."""
    columns = np.array([stars.mag[band] for band in sorted(stars.mag)])
    known = np.isfinite(columns)
    return np.where(known.any(0), np.nanmedian(np.where(known.any(0), columns, 99.0), axis=0), 99.0)


def measure_frame(path: Path, frame: str, recipe: Recipe) -> Measured:
    """Read, calibrate, recognise and measure one frame; the same arguments give bit-equal results.

    Parameters
    ----------
    path, frame
        The file and its SHA-256.
    recipe
        How to treat it.

    Returns
    -------
    Measured
        ``outcome`` says "unreadable" or "no match" with the reason where that is how it ended; nothing is raised
        for a bad file.
    """
    start = time.perf_counter()
    digest = recipe.digest()
    info: FrameInfo | None = None
    try:
        opened = open_frame(path, recipe.settings)
        info = opened.info
        _require(info)
        adu = opened.read()
        ny = info.ny
        image = calibrate(
            adu, info, recipe.masters, recipe.settings,
            overscan_adu=opened.overscan_rows(0, ny), relative_gain=opened.relative_gain(0, ny),
        )  # fmt: skip
        info = replace(info, notes=tuple(dict.fromkeys((*info.notes, *image.notes))))
    except FrameError as error:
        return Measured(frame, digest, "unreadable", str(error), info, seconds=time.perf_counter() - start)
    result = _measure_image(Measured(frame, digest, "measured", "", info), adu, image, info, recipe)
    return replace(result, seconds=time.perf_counter() - start)


def _require(info: FrameInfo) -> None:
    if info.band is None:
        raise FrameError(
            f"filter {info.filter_name!r} has no band; name it under [filters] in observatory.toml."
            if info.filter_name
            else "the header names no filter; add its keyword, or the filter under [filters] in observatory.toml."
        )
    if info.mjd_mid is None:
        raise FrameError("the header holds no usable time of observation; " + (info.notes[-1] if info.notes else ""))
    if not info.exposure_s:
        raise FrameError("the header states no exposure time.")


def _measure_image(blank: Measured, adu: Image, image: CalibratedImage, info: FrameInfo, recipe: Recipe) -> Measured:
    detections = detect(image.data_e, image.mask, saturation_e=image.saturation_e)
    match = _find_field(detections, info, recipe, image.data_e.shape)
    fwhm_px = frame_fwhm(detections)
    if match.solution is None:
        quality = _quality(image, detections, fwhm_px, info, None, None, recipe.settings)
        return replace(blank, outcome="no match", reason=match.reason, quality=quality)
    behind = backdrop(image.data_e, image.mask, detections, fwhm_px)
    trails = find_trails(behind, image.data_e, image.mask, detections, fwhm_px)
    table = _measure_stars(adu, image, detections, fwhm_px, match.solution, recipe)
    mark_trails(table, trails, fwhm_px, match.solution.scale_arcsec)
    growth_mag, growth_err_mag = growth_curve(table)
    ny, nx = image.data_e.shape
    ra_deg, dec_deg = pixel_to_sky(match.solution, np.array([(nx - 1) / 2]), np.array([(ny - 1) / 2]))
    centre = (float(ra_deg[0]), float(dec_deg[0]))
    assert info.mjd_mid is not None
    return replace(
        blank,
        solution=match.solution,
        stars=table,
        growth_mag=growth_mag,
        growth_err_mag=growth_err_mag,
        bjd_tdb=float(bjd_tdb(info.mjd_mid, *centre, recipe.settings.site)),
        quality=replace(
            _quality(image, detections, fwhm_px, info, centre, table, recipe.settings),
            n_trails=len(trails),
            sky_gradient=behind.gradient,
        ),
        stamps=pack(image, table, fwhm_px, match.solution),
    )


def _find_field(detections: Detections, info: FrameInfo, recipe: Recipe, shape: tuple[int, int]) -> FieldMatch:
    """The field at the scale that is stated; where that does not fit, at any: it may be that of an unbinned pixel."""
    stars = recipe.astrometric
    mag = _ranking_mag(stars)
    hint = FieldHint(ra_deg=info.ra_deg, dec_deg=info.dec_deg, scale_arcsec=_scale(info, recipe.settings))
    if recipe.camera is not None:
        known = replace(hint, scale_arcsec=recipe.camera.scale_arcsec, scale_tolerance=SAME_SCALE,
                        mirrored=recipe.camera.mirrored)  # fmt: skip
        return match_field(detections, stars.ra_deg, stars.dec_deg, mag, known, shape)
    match = match_field(detections, stars.ra_deg, stars.dec_deg, mag, hint, shape)
    if match.solution is not None or hint.scale_arcsec is None:
        return match
    return match_field(detections, stars.ra_deg, stars.dec_deg, mag, replace(hint, scale_arcsec=None), shape)


def _scale(info: FrameInfo, settings: Settings) -> float | None:
    """Arcsec per pixel as binned: what the observer says, else what the header says."""
    stated = settings.camera.scale_arcsec
    return stated * info.binning[0] if stated is not None else info.scale_arcsec


def _measure_stars(
    adu: Image,
    image: CalibratedImage,
    detections: Detections,
    fwhm_px: float,
    solution: FieldSolution,
    recipe: Recipe,
) -> NDArray[Any]:
    """Field stars at their centroids and targets at their one forced position, as STAR_DTYPE rows."""
    ny, nx = image.data_e.shape
    margin = CLOSEST_TO_EDGE_FWHM * fwhm_px
    target_ra = np.array([target.ra_deg for target in recipe.targets])
    target_dec = np.array([target.dec_deg for target in recipe.targets])
    target_x, target_y = sky_to_pixel(solution, target_ra, target_dec)
    inside = (target_x > margin) & (target_x < nx - 1 - margin) & (target_y > margin) & (target_y < ny - 1 - margin)

    x, y, _, found = centroid(image.data_e, detections.x_px, detections.y_px, fwhm_px)
    # The target's own detection is not a field star: its forced position stands for it.
    away = np.ones(len(x), bool)
    for tx, ty in zip(target_x[inside], target_y[inside], strict=True):
        away &= np.hypot(x - tx, y - ty) > fwhm_px
    x, y, found = x[away][:MOST_STARS], y[away][:MOST_STARS], found[away][:MOST_STARS]
    hosts = np.array([np.nan if t.host_arcsec is None else t.host_arcsec for t in recipe.targets])
    all_x = np.concatenate([x, target_x[inside]])
    all_y = np.concatenate([y, target_y[inside]])
    neighbours = np.column_stack([
        np.concatenate([detections.x_px, target_x[inside]]),
        np.concatenate([detections.y_px, target_y[inside]]),
    ])  # fmt: skip
    table = measure_stars(
        image, all_x, all_y, fwhm_px, solution.scale_arcsec, neighbours,
        centred=np.concatenate([found, np.zeros(int(inside.sum()), bool)]), raw_adu=adu,
        linear_limit_adu=recipe.settings.camera.linear_limit_adu,
        host_arcsec=np.concatenate([np.full(len(x), np.nan), hosts[inside]]),
    )  # fmt: skip
    table["ra_deg"], table["dec_deg"] = pixel_to_sky(solution, all_x, all_y)
    for row, k in enumerate(np.flatnonzero(inside), start=len(x)):
        table["role"][row] = 1
        table["target"][row] = recipe.targets[k].name
        table["ra_deg"][row], table["dec_deg"][row] = target_ra[k], target_dec[k]
    psf = frame_psf(image, table, neighbours, fwhm_px, solution.scale_arcsec)
    measure_psf(image, table, neighbours, fwhm_px, psf)
    snr = np.nanmax(table["flux_e"] / table["flux_err_e"], axis=1, initial=0.0)
    kept: NDArray[Any] = table[(table["role"] == 1) | (snr > LEAST_STAR_SNR)]
    return kept


def _quality(
    image: CalibratedImage,
    detections: Detections,
    fwhm_px: float,
    info: FrameInfo,
    centre: tuple[float, float] | None,
    table: NDArray[Any] | None,
    settings: Settings,
) -> Quality:
    site, telescope = settings.site, settings.telescope
    air = sun = None
    assert info.exposure_s is not None
    assert info.mjd_mid is not None
    if site is not None:
        sun = sun_altitude(info.mjd_mid, site)
        if centre is not None:
            air = airmass(info.mjd_mid, *centre, site)
    flicker = 0.0
    if telescope.aperture_m is not None and air is not None and site is not None:
        flicker = scintillation(
            telescope.aperture_m, air, info.exposure_s, site.height_m, telescope.scintillation_coefficient
        )
    bright = slice(0, 50)
    full = detections.saturated
    angles = np.exp(2j * np.radians(detections.position_angle_deg[bright]))
    if table is not None and np.isfinite(table["sky_e_px"]).any():
        sky, sigma = float(np.nanmedian(table["sky_e_px"])), float(np.nanmedian(table["sky_sigma_e_px"]))
    else:
        sky, sigma = float(np.nanmedian(image.data_e[::8, ::8])), float("nan")
    return Quality(
        fwhm_px=fwhm_px,
        elongation=float(np.median(detections.elongation[bright])) if len(detections) else float("nan"),
        trail_agreement=float(abs(angles.mean())) if len(detections) else 0.0,
        sky_e_px=sky,
        sky_sigma_e_px=sigma,
        n_detected=len(detections),
        n_saturated=int(detections.saturated.sum()),
        exposure_s=info.exposure_s,
        airmass=air,
        scintillation=flicker,
        sun_altitude_deg=sun,
        flat_used=image.flat_used,
        saturated_px=tuple(
            (round(float(x), 1), round(float(y), 1))
            for x, y in zip(detections.x_px[full][:MOST_SATURATED], detections.y_px[full][:MOST_SATURATED], strict=True)
        ),
    )


def solve(
    measured: Iterable[Measured],
    sequence: Sequence,
    targets: Iterable[Target],
    choices: Choices,
    settings: Settings,
    *,
    with_stars: bool = False,
) -> Solution:
    """Verdicts, zero points and points from stored measurements; the order of ``measured`` does not matter.

    Parameters
    ----------
    measured
        One row a frame.
    with_stars
        Also give the comparison stars' points.
    """
    standard = solve_standard(measured, sequence, choices, settings)
    solution = solve_points(standard, targets, choices, settings)
    return replace(solution, star_points=star_points(standard, sequence)) if with_stars else solution


def solve_points(
    standard: StandardSolution, targets: Iterable[Target], choices: Choices, settings: Settings
) -> Solution:
    """The second half of `solve`: all that an excluded point changes, the standard system being solved."""
    frame_points, night_points = make_points(standard, tuple(targets), choices, settings.site)
    return Solution(
        verdicts=standard.verdicts,
        zero_points=standard.zero_points,
        colour_terms=standard.colour_terms,
        stars=standard.stars,
        frame_points=frame_points,
        night_points=night_points,
        notes=standard.notes,
    )
