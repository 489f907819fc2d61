"""The target's own colour at every visit, from its own magnitudes and never from anything else.

Two bands that share a colour (B and V, g and r) are solved exactly as a pair; R, I and i then take V and r as
standard. The other band is taken at the same moment: interpolated between visits on both sides, or the
nearest one, if these are close enough for the kind of star. Without it the colour stays unknown.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from reduce.curve.visits import Visit
from reduce.records import COLOUR_OF_BAND, Floats, TargetKind
from reduce.standard.colour import solve_colour, to_standard

PARTNER_WITHIN_D: dict[TargetKind, float] = {"type_ia": 1.5, "cepheid": 0.1, "rr_lyrae": 0.01, "other": 1.5}
"""How far in time the other band of a colour may be."""


@dataclass(frozen=True, slots=True)
class _Track:
    """One band of the target over time."""

    mjd: Floats
    mag: Floats
    err: Floats
    coefficient: Floats

    def at(self, mjd: float, within_d: float) -> tuple[float, float, float]:
        """Magnitude, error and coefficient at a moment; NaN when no visit is near."""
        near = np.flatnonzero(np.abs(self.mjd - mjd) <= within_d)
        if len(near) == 0:
            return float("nan"), float("nan"), float("nan")
        before, after = near[self.mjd[near] <= mjd], near[self.mjd[near] >= mjd]
        if len(before) == 0 or len(after) == 0 or before[-1] == after[0]:
            k = int(near[np.argmin(np.abs(self.mjd[near] - mjd))])
            return float(self.mag[k]), float(self.err[k]), float(self.coefficient[k])
        i, j = int(before[-1]), int(after[0])
        gap = self.mjd[j] - self.mjd[i]
        part = float((mjd - self.mjd[i]) / gap) if gap > 0 else 0.5
        mag, coefficient = (float((1 - part) * v[i] + part * v[j]) for v in (self.mag, self.coefficient))
        return mag, float(np.hypot((1 - part) * self.err[i], part * self.err[j])), coefficient


def _track(visits: Sequence[Visit], band: str, standard: bool) -> _Track:
    rows = []
    for visit in visits:
        if visit.band != band or visit.state != "kept":
            continue
        mag, err = visit.natural
        if not np.isfinite(mag):
            continue
        if standard:
            colour = visit.colour if np.isfinite(visit.colour) else np.nan_to_num(visit.system.term.colour_mean)
            mag = to_standard(mag, visit.coefficient, float(colour))
        rows.append((visit.mjd, mag, err, 0.0 if standard else visit.coefficient))
    table = np.array(sorted(rows)).reshape(-1, 4)
    return _Track(table[:, 0], table[:, 1], table[:, 2], table[:, 3])


def fill_colours(visits: Sequence[Visit], kind: TargetKind) -> None:
    """Give every visit of one target its standard colour; visits without a partner keep NaN."""
    within = PARTNER_WITHIN_D[kind]
    bands = {visit.band for visit in visits}
    # Pairs first: the other bands take V or r as standard, so these must have their colour by then.
    for band in sorted(bands, key=lambda band: (not _is_paired(band), band)):
        other = _partner(band)
        if other not in bands:
            continue
        track = _track(visits, other, standard=not _is_paired(band))
        for visit in visits:
            if visit.band == band and visit.chosen:
                _fill(visit, track, band == COLOUR_OF_BAND[band][0], within)


def _partner(band: str) -> str:
    blue, red = COLOUR_OF_BAND[band]
    return red if band == blue else blue


def _is_paired(band: str) -> bool:
    """Whether the other band is transformed with the same colour."""
    return COLOUR_OF_BAND[_partner(band)] == COLOUR_OF_BAND[band]


def _fill(visit: Visit, track: _Track, is_blue: bool, within_d: float) -> None:
    mag, err = visit.natural
    other, other_err, other_coefficient = track.at(visit.mjd, within_d)
    if not (np.isfinite(mag) and np.isfinite(other)):
        return
    if is_blue:
        visit.colour = solve_colour(mag, other, visit.coefficient, other_coefficient)
    else:
        visit.colour = solve_colour(other, mag, other_coefficient, visit.coefficient)
    visit.colour_err = float(np.hypot(err, other_err))
