"""Fields of published standard stars: the table, and which of its fields a frame points at."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np

from reduce.field.sequence import cross_match, read_sequence
from reduce.field.wcs import project
from reduce.records import FrameInfo, Sequence

FILE_NAME = "standards.csv"
"""In config/ and, with an observer's own standards, in a campaign's folder."""
POINTING_DEG = 0.5
"""A telescope that claims to point this near to a standard has it on the frame, or nearly."""
FIELD_DEG = 1.0
LEAST_STANDARDS = 3
"""Fewer make no pattern that a field could be recognised by."""
SAME_STAR_ARCSEC = 2.0


def read_standards(folder: Path) -> Sequence:
    """The built-in table and the observer's own ``standards.csv`` in ``folder``, whose entry wins for a star in both.

    Raises
    ------
    SequenceError
        The observer's table cannot be used.
    """
    built_in = read_sequence(Path(str(files("reduce") / "_config" / FILE_NAME)))
    if not (folder / FILE_NAME).exists():
        return built_in
    own = read_sequence(folder / FILE_NAME)
    again = cross_match(built_in.ra_deg, built_in.dec_deg, own.ra_deg, own.dec_deg, SAME_STAR_ARCSEC) >= 0
    names = set(own.ids)
    again |= np.array([star in names for star in built_in.ids])
    return joined(own, chosen(built_in, np.flatnonzero(~again)))


def standard_field(info: FrameInfo, standards: Sequence, own_field: Sequence) -> Sequence | None:
    """The standards about the place where a frame claims to point; None for a frame of the campaign's own field.

    What the header calls the object does not matter. None also for a frame without a position, or where fewer than
    three standards are known.
    """
    if info.ra_deg is None or info.dec_deg is None:
        return None
    if nearest_deg(info.ra_deg, info.dec_deg, own_field) < POINTING_DEG:
        return None
    if nearest_deg(info.ra_deg, info.dec_deg, standards) > POINTING_DEG:
        return None
    distance = _distances_deg(info.ra_deg, info.dec_deg, standards)
    near = np.flatnonzero(distance < FIELD_DEG)
    return chosen(standards, near) if len(near) >= LEAST_STANDARDS else None


def nearest_deg(ra_deg: float, dec_deg: float, stars: Sequence) -> float:
    """Degrees from a place to the nearest star; infinite where none is in the same half of the sky."""
    distance = _distances_deg(ra_deg, dec_deg, stars)
    return float(distance.min()) if len(distance) else float("inf")


def _distances_deg(ra_deg: float, dec_deg: float, stars: Sequence) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Gnomonic distance, infinite beyond 90°."""
    xi, eta = project(stars.ra_deg, stars.dec_deg, ra_deg, dec_deg)
    size = np.hypot(xi, eta)
    return np.where(np.isfinite(size), size, np.inf)


def chosen(stars: Sequence, index: np.ndarray[tuple[int], np.dtype[np.int64]]) -> Sequence:
    """Some stars of a list, in the order of ``index``."""
    return Sequence(
        stars.name,
        tuple(stars.ids[k] for k in index),
        stars.ra_deg[index],
        stars.dec_deg[index],
        {band: mag[index] for band, mag in stars.mag.items()},
        {band: err[index] for band, err in stars.mag_err.items()},
    )


def joined(first: Sequence, second: Sequence) -> Sequence:
    """Both lists one behind the other; a magnitude that one list does not know is NaN."""
    both = (first, second)
    bands = sorted(first.mag.keys() | second.mag.keys())

    def column(which: str, band: str) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return np.concatenate([getattr(s, which).get(band, np.full(len(s), np.nan)) for s in both])

    return Sequence(
        first.name,
        first.ids + second.ids,
        np.concatenate([s.ra_deg for s in both]),
        np.concatenate([s.dec_deg for s in both]),
        {band: column("mag", band) for band in bands},
        {band: column("mag_err", band) for band in bands},
    )
