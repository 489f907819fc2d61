"""What the frames say of the comparison sequence itself: floor, colour range, and better stars beside it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np

from reduce.field.sequence import cross_match
from reduce.records import BANDS, COLOUR_OF_BAND, Point, Sequence, StarResult
from reduce.standard.field_stars import LEAST_MEASUREMENTS, FieldStars
from reduce.standard.scatter import additive_floor
from reduce.standard.solve import StandardSolution

SAME_STAR_ARCSEC = 3.0
OUTSIDE_MAG = 0.1
"""How far beyond the comparison stars' colours a target may be before it is said."""
NEAR_COLOUR_MAG = 0.3
MOST_PROPOSED = 20
LARGEST_ERR_MAG, LARGEST_EXCESS_MAG = 0.01, 0.01
LEAST_SHARE = 0.8
"""Of the frames on which the best seen star was measured."""


@dataclass(frozen=True, slots=True)
class BandCheck:
    """The sequence in one band of one camera."""

    camera: str
    band: str
    n_used: int
    n_set_aside: int
    entry_scatter_mag: float
    """What the entries scatter beyond their stated errors; NaN with fewer than five stars."""
    floor_mag: float
    """Error that all magnitudes of this band share through the sequence, however many frames there are."""
    star_colours: tuple[float, float] | None
    target_colours: tuple[float, float] | None
    sentence: str
    """What wants doing; empty when nothing does."""


@dataclass(frozen=True, slots=True)
class ProposedStar:
    """A measured star that would make a good comparison star."""

    ra_deg: float
    dec_deg: float
    mag: Mapping[str, float]
    err: Mapping[str, float]
    rms_mag: float
    """The largest of its bands."""
    n_frames: int
    """The smallest of its bands."""


@dataclass(frozen=True, slots=True)
class SequenceCheck:
    """All that `check_sequence` found."""

    bands: tuple[BandCheck, ...]
    stars: tuple[StarResult, ...]
    proposed: tuple[ProposedStar, ...]


def check_sequence(
    solution: StandardSolution, sequence: Sequence, points: Iterable[Point], field: FieldStars
) -> SequenceCheck:
    """Check a sequence against the frames that it calibrates.

    Parameters
    ----------
    points
        Nightly points of the targets, for their colours.
    field
        All measured stars of the field.
    """
    colours = target_colours(points)
    bands = tuple(_band_check(system.camera, system.band, solution, sequence, colours) for system in solution.systems)
    order = {star: k for k, star in enumerate(sequence.ids)}
    stars = sorted(solution.stars, key=lambda row: (order.get(row.star, -1), BANDS.index(row.band)))
    return SequenceCheck(bands, tuple(stars), propose_stars(field, sequence, colours))


def target_colours(points: Iterable[Point]) -> dict[tuple[str, str], tuple[float, float]]:
    """Colour index → bluest and reddest of the kept nightly points."""
    nights: dict[tuple[str, str], dict[str, float]] = {}
    for point in points:
        if point.state == "kept" and point.mag is not None:
            nights.setdefault((point.star, point.night), {})[point.band] = point.mag
    found: dict[tuple[str, str], tuple[float, float]] = {}
    for pair in sorted(set(COLOUR_OF_BAND.values())):
        colours = [mags[pair[0]] - mags[pair[1]] for mags in nights.values() if pair[0] in mags and pair[1] in mags]
        if colours:
            found[pair] = min(colours), max(colours)
    return found


def _band_check(
    camera: str,
    band: str,
    solution: StandardSolution,
    sequence: Sequence,
    colours: Mapping[tuple[str, str], tuple[float, float]],
) -> BandCheck:
    system = next(s for s in solution.systems if (s.camera, s.band) == (camera, band))
    rows = [row for row in solution.stars if row.band == band]
    used = [row for row in rows if row.word == "used" and np.isfinite(row.residual_mag)]
    place = {star: k for k, star in enumerate(sequence.ids)}
    stated = np.nan_to_num(np.array([sequence.mag_err[band][place[row.star]] for row in used]), nan=0.02)
    noise = np.array([np.nan_to_num(row.rms_mag) / np.sqrt(max(row.n_frames, 1)) for row in used])
    residual = np.array([row.residual_mag for row in used])
    scatter = float("nan")
    if len(used) >= 5:
        dof = len(used) - (2 if system.term.fitted else 1)
        scatter = additive_floor(residual, np.maximum(np.hypot(stated, noise), 1e-4), dof)
    known = np.array([row.colour for row in used if np.isfinite(row.colour)])
    stars = (float(known.min()), float(known.max())) if len(known) else None
    target = colours.get(COLOUR_OF_BAND[band])
    return BandCheck(
        camera=camera, band=band, n_used=len(used), n_set_aside=sum(row.word == "set aside" for row in rows),
        entry_scatter_mag=scatter, floor_mag=system.sequence_err_mag, star_colours=stars, target_colours=target,
        sentence=_sentence(band, system.term.term_err, stars, target, len(used)),
    )  # fmt: skip


def _sentence(
    band: str,
    term_err: float,
    stars: tuple[float, float] | None,
    target: tuple[float, float] | None,
    n_used: int,
) -> str:
    if n_used < 5:
        return f"{band}: only {n_used} comparison stars are used; add stars."
    if stars is None:
        return f"{band}: the comparison stars have no colours, so no colour term can be applied."
    if target is None:
        return ""
    blue, red = COLOUR_OF_BAND[band]
    beyond = max(stars[0] - target[0], target[1] - stars[1])
    if beyond <= OUTSIDE_MAG:
        return ""
    side = "bluer" if stars[0] - target[0] >= target[1] - stars[1] else "redder"
    return (
        f"{band}: the target is up to {beyond:.2f} mag {side} in {blue}−{red} than any comparison star, which adds "
        f"{1000 * term_err * beyond:.1f} mmag of error; add stars of its colour, or observe standards."
    )


def propose_stars(
    field: FieldStars, sequence: Sequence, colours: Mapping[tuple[str, str], tuple[float, float]]
) -> tuple[ProposedStar, ...]:
    """Stars that are not in the sequence but constant, well measured, alone and of the target's colour; best first."""
    if len(field) == 0 or not field.bands:
        return ()
    fit = cross_match(field.ra_deg, field.dec_deg, sequence.ra_deg, sequence.dec_deg, SAME_STAR_ARCSEC) < 0
    fit &= ~field.crowded
    total = np.zeros(len(field))
    bands = [band for band in field.bands if np.isfinite(field.mag[band]).any()]
    for band in bands:
        n, rms, expected = field.n_frames[band], field.rms[band], field.expected_rms[band]
        many = max(LEAST_MEASUREMENTS, LEAST_SHARE * float(n.max(initial=0)))
        excess = np.sqrt(np.maximum(np.nan_to_num(rms, nan=np.inf) ** 2 - np.nan_to_num(expected) ** 2, 0.0))
        good = np.isfinite(field.mag[band]) & (n >= many) & (field.err[band] <= LARGEST_ERR_MAG)
        fit &= good & (excess <= LARGEST_EXCESS_MAG)
        total += np.nan_to_num(field.err[band], nan=np.inf) ** 2
    for (blue, red), (low, high) in colours.items():
        if blue in bands and red in bands:
            colour = field.mag[blue] - field.mag[red]
            fit &= np.nan_to_num(colour, nan=np.inf) > low - NEAR_COLOUR_MAG
            fit &= np.nan_to_num(colour, nan=np.inf) < high + NEAR_COLOUR_MAG
    if not bands:
        return ()
    best = [k for k in np.argsort(total, kind="stable") if fit[k]][:MOST_PROPOSED]
    return tuple(
        ProposedStar(
            ra_deg=float(field.ra_deg[k]),
            dec_deg=float(field.dec_deg[k]),
            mag={band: float(field.mag[band][k]) for band in bands},
            err={band: float(field.err[band][k]) for band in bands},
            rms_mag=max(float(field.rms[band][k]) for band in bands),
            n_frames=min(int(field.n_frames[band][k]) for band in bands),
        )
        for k in best
    )
