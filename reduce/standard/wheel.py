"""A filter wheel that slipped: the header names one filter, the stars say another.

In the right filter catalogue - measured hardly depends on a star's colour: the colour term, a few hundredths. In a
wrong one it does (B against V: by 1 mag per mag of B-V; V against R: by 1 mag per mag of V-R). No other fault makes
red stars brighter and blue ones fainter by as much, so the slope of a frame alone gives a slip away, before anything
else is solved; which filter it was is then found by trying the others.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from reduce.records import COLOUR_OF_BAND, LADDER_FWHM, Floats
from reduce.records import Sequence as ComparisonSequence
from reduce.standard.colour import LEAST_COLOUR_RANGE, LEAST_STARS, catalogue_colour
from reduce.standard.extinction import TYPICAL_FIRST_ORDER
from reduce.standard.frame_stars import FrameStars

RADIUS = LADDER_FWHM.index(1.5)
SLIPPED_SLOPE, SLIPPED_SIGMA = 0.2, 5.0
"""mag per mag; colour terms of filters sold under one name differ by less (common practice)."""
NAMED_SLOPE, NAMED_LEVEL_MAG = 0.15, 1.0
"""How near slope and zero point must come to those of the filter that is named."""
STAR_SCATTER_MAG = 0.02
"""Stars of one colour are not of one spectrum."""
LEAST_FRAMES = 3
ROUNDS = 10


@dataclass(frozen=True, slots=True)
class _Lines:
    """catalogue - measured against colour, one line a frame; NaN without enough stars."""

    slope: Floats
    slope_err: Floats
    level: Floats
    """At the stars' mean colour, airmass taken off."""


def wheel_slips(frames: Sequence[FrameStars], sequence: ComparisonSequence) -> dict[str, str]:
    """Frame → what its stars look like, in words, for frames of one camera whose filter is not the stated one.

    Parameters
    ----------
    frames
        All frames of the camera, in every band.
    sequence
        Comparison stars.
    """
    of_band: dict[str, list[FrameStars]] = {}
    for frame in frames:
        of_band.setdefault(frame.band, []).append(frame)
    lines = {band: _lines(group, band, sequence) for band, group in of_band.items()}
    usual = {band: _usual(one) for band, one in lines.items()}
    slips: dict[str, str] = {}
    for band in sorted(of_band):
        one = lines[band]
        off = one.slope - usual[band][0]
        far = np.abs(off) > np.maximum(SLIPPED_SLOPE, SLIPPED_SIGMA * one.slope_err)
        for k in np.flatnonzero(far):
            frame = of_band[band][k]
            named = _named(frame, band, sequence, usual)
            looks = f"the stars look like {named}, not {band}" if named else f"the stars do not look like {band}"
            slips[frame.frame] = f"wrong filter: {looks} (colour slope {one.slope[k]:+.2f})"
    return slips


def _usual(lines: _Lines) -> tuple[float, float]:
    """Slope and level of the band's filter: medians of its frames; few frames cannot outvote a slipped one."""
    known = lines.slope[np.isfinite(lines.slope)]
    slope = float(np.median(known)) if len(known) >= LEAST_FRAMES else 0.0
    level = float(np.nanmedian(lines.level)) if np.isfinite(lines.level).any() else float("nan")
    # Most frames of a band may have gone through the wrong filter too.
    return (slope, level) if abs(slope) < SLIPPED_SLOPE else (0.0, level)


def _named(frame: FrameStars, band: str, sequence: ComparisonSequence, usual: Mapping[str, tuple[float, float]]) -> str:
    """Band whose colour slope and zero point fit best, '' when none fits."""
    best, found = NAMED_SLOPE, ""
    for other in COLOUR_OF_BAND:
        if other == band or other not in sequence.mag:
            continue
        one = _lines([frame], other, sequence)
        slope, level = usual.get(other, (0.0, float("nan")))
        off = abs(float(one.slope[0]) - slope)
        if off < best and not abs(float(one.level[0]) - level) > NAMED_LEVEL_MAG:
            best, found = off, other
    return found


def _lines(frames: Sequence[FrameStars], band: str, sequence: ComparisonSequence) -> _Lines:
    """Robust lines (Cauchy weights) of all frames at once."""
    colour = catalogue_colour(sequence, band)
    mag = np.array([frame.mag[:, RADIUS] for frame in frames])
    err = np.array([frame.mag_err[:, RADIUS] for frame in frames])
    airmass = np.array([1.0 if frame.quality.airmass is None else frame.quality.airmass for frame in frames])
    catalogue = np.asarray(sequence.mag.get(band, np.full(len(sequence), np.nan)), dtype=float)
    y = catalogue - mag
    known = np.isfinite(y) & np.isfinite(colour) & (err > 0)
    c = np.where(known, np.broadcast_to(colour, y.shape), 0.0)
    y = np.where(known, y, 0.0)
    variance = np.where(known, err, 1.0) ** 2 + STAR_SCATTER_MAG**2
    weight = np.where(known, 1.0 / variance, 0.0)
    slope, level, spread = np.zeros(len(y)), np.zeros(len(y)), np.ones(len(y))
    used = weight
    for _ in range(ROUNDS):
        total = np.maximum(used.sum(axis=1), 1e-300)
        c_mean, y_mean = (used * c).sum(axis=1) / total, (used * y).sum(axis=1) / total
        dc = c - c_mean[:, None]
        spread = np.maximum((used * dc**2).sum(axis=1), 1e-300)
        slope, level = (used * dc * y).sum(axis=1) / spread, y_mean
        rest = y - level[:, None] - slope[:, None] * dc
        chi2 = np.where(known, rest**2 / variance, 0.0).sum(axis=1) / np.maximum(known.sum(axis=1), 1)
        used = weight / (1.0 + rest**2 / (4.0 * variance * np.maximum(1.0, chi2)[:, None]))
    chi2 = (used * rest**2).sum(axis=1) / np.maximum(known.sum(axis=1) - 2, 1)
    slope_err = np.sqrt(np.maximum(chi2, 1.0) / spread)
    reach = np.where(known, c, -np.inf).max(axis=1, initial=-np.inf) - np.where(known, c, np.inf).min(
        axis=1, initial=np.inf
    )
    enough = (known.sum(axis=1) >= LEAST_STARS) & (reach > LEAST_COLOUR_RANGE)
    level = level + TYPICAL_FIRST_ORDER.get(band, 0.2) * airmass
    return _Lines(np.where(enough, slope, np.nan), np.where(enough, slope_err, np.nan), np.where(enough, level, np.nan))
