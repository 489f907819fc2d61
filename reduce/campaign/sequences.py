"""The comparison sequence of a campaign: checked against its frames, replaced, or made anew from what was measured."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np

from reduce.campaign.people import who
from reduce.field.sequence import SequenceError, cross_match, read_sequence, write_sequence
from reduce.plain_text import clean_text
from reduce.records import Floats, Measured, Sequence
from reduce.standard.field_stars import (
    LEAST_MEASUREMENTS,
    CalibratedFrame,
    FieldStars,
    frames_by_sequence,
    frames_by_standards,
    mean_stars,
    steady,
)
from reduce.standard.sequence_check import SAME_STAR_ARCSEC, SequenceCheck, check_sequence

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

CalibratedBy = Literal["standards", "sequence"]
ASTROMETRIC = "astrometric sequence"
"""Setting: id of the sequence whose stars the field is recognised by; absent, the one in force."""
FEWEST_STARS = 3
LEAST_COMMON = 6
"""So many shared positions make a new sequence one of the same field: its frames need not be measured again."""
SAME_POSITION_ARCSEC = 2.0
PHOTOMETRIC_RMS_MAG = 0.03
"""Standards of a night that scatter more were not observed under a clear sky (common practice)."""
LARGEST_ERR_MAG, LARGEST_EXCESS_MAG = 0.03, 0.02
"""Of a star that enters a new sequence: its mean's error, and what it scatters beyond its errors."""


def read_usable_sequence(path: Path) -> Sequence:
    """A comparison sequence of enough stars to find a field by.

    Raises
    ------
    SequenceError
        One sentence.
    """
    stars = read_sequence(path)
    if len(stars) < FEWEST_STARS:
        raise SequenceError(
            f"{clean_text(path)} holds {len(stars)} stars; at least {FEWEST_STARS} are needed to find the field."
        )
    return stars


def check_campaign_sequence(campaign: Campaign) -> SequenceCheck:
    """The sequence in force against all kept frames."""
    standard = campaign.calibrated().standard
    field = mean_stars(frames_by_sequence(_field_rows(campaign), standard))
    return check_sequence(standard, campaign.sequence(), campaign.curve_points(), field)


def _field_rows(campaign: Campaign) -> list[Measured]:
    away = campaign.calibrated().of_standards
    return [row for row in campaign.measured() if row.outcome == "measured" and row.frame not in away]


def import_sequence(campaign: Campaign, path: Path) -> tuple[Sequence, bool]:
    """Put a new comparison sequence in force; True when frames will have to be measured again for it.

    They need not when it shares stars with the one that the field is recognised by: every star of a frame was measured.

    Raises
    ------
    SequenceError
        The file cannot be used, or holds the sequence in force.
    """
    new = read_usable_sequence(path)
    book, old = campaign.book, campaign.astrometric()
    common = int((cross_match(new.ra_deg, new.dec_deg, old.ra_deg, old.dec_deg, SAME_POSITION_ARCSEC) >= 0).sum())
    same_field = common >= min(LEAST_COMMON, len(new))
    if same_field and not book.setting(ASTROMETRIC):
        book.set_setting(ASTROMETRIC, book.sequence_id())
    if not book.add_sequence(new):
        raise SequenceError(f"{clean_text(path)} holds the comparison sequence that is in force already.")
    if not same_field:
        book.set_setting(ASTROMETRIC, book.sequence_id())
    what = "it shares" if same_field else "frames are measured again: it shares"
    words = f"Comparison sequence {new.name} of {len(new)} stars in force; {what} {common} with the one before."
    book.note("", words, who(), kind="event")
    return new, not same_field


def make_sequence(
    campaign: Campaign, path: Path, by: CalibratedBy, nights: frozenset[str] = frozenset()
) -> tuple[Sequence, tuple[str, ...]]:
    """Write a sequence of the stars measured on nights that standards, or the sequence in force, calibrate.

    Parameters
    ----------
    nights
        Dates of the evenings; empty: all that are clear.

    Returns
    -------
    The sequence, and the nights that it was made from.

    Raises
    ------
    SequenceError
        No such night, or no star that could be trusted; or the file cannot be written.
    """
    frames, shared = _calibrated(campaign, by, nights)
    if not frames:
        named = f" on {', '.join(sorted(nights))}" if nights else ""
        raise SequenceError(
            f"No clear night with standards and frames of the target's field{named}: observe standards, or make the "
            "sequence with --by sequence."
            if by == "standards"
            else f"No kept frame{named} is calibrated by the comparison sequence."
        )
    made = _as_sequence(mean_stars(frames), campaign.sequence(), shared, path.stem)
    if len(made) < FEWEST_STARS:
        raise SequenceError(
            f"Only {len(made)} stars were measured well enough for a sequence; {LEAST_MEASUREMENTS} frames a band "
            "are the least, with the two bands of a colour among them."
        )
    used = tuple(sorted({frame.night for frame in frames}))
    means = "published standard stars" if by == "standards" else f"the comparison sequence {campaign.sequence().name}"
    comments = (f"Measured on {', '.join(used)}, calibrated by {means}.", "Errors hold what all stars share.")
    write_sequence(path, made, comments)
    return made, used


def _calibrated(
    campaign: Campaign, by: CalibratedBy, nights: frozenset[str]
) -> tuple[list[CalibratedFrame], dict[str, float]]:
    """Frames of the target's field, and the error that all magnitudes of each band share."""
    solved = campaign.calibrated()
    rows = _field_rows(campaign)
    if by == "sequence":
        shared: dict[str, float] = {}
        for system in solved.standard.systems:
            shared[system.band] = max(shared.get(system.band, 0.0), system.sequence_err_mag)
        return frames_by_sequence(rows, solved.standard, nights), shared
    clear = [
        (transformation, night)
        for transformation in solved.transformations
        for night in transformation.nights
        if transformation.term_fitted and night.rms_mag <= PHOTOMETRIC_RMS_MAG
    ]
    rows = [row for row in rows if solved.standard.verdicts[row.frame].state == "kept"]
    dates = frozenset(night.night for _, night in clear)
    wanted = (nights & dates if nights else dates) or frozenset({"none"})
    frames = steady(frames_by_standards(rows, [t for t, _ in clear], campaign.settings, wanted))
    errors: dict[str, list[float]] = {}
    for transformation, night in clear:
        if night.night in wanted:
            errors.setdefault(transformation.band, []).append(night.zp_err_mag)
    return frames, {band: float(np.mean(found) / np.sqrt(len(found))) for band, found in errors.items()}


def _as_sequence(field: FieldStars, old: Sequence, shared: dict[str, float], name: str) -> Sequence:
    """The stars that are constant, alone and well measured, brightest first; those of the old sequence keep names."""
    bands = [band for band in field.bands if np.isfinite(field.mag[band]).any()]
    mag: dict[str, Floats] = {}
    err: dict[str, Floats] = {}
    known = np.zeros(len(field), bool)
    steady = ~field.crowded
    for band in bands:
        excess = np.nan_to_num(field.rms[band]) ** 2 - np.nan_to_num(field.expected_rms[band]) ** 2
        steady &= excess <= LARGEST_EXCESS_MAG**2
        total = np.hypot(field.err[band], shared.get(band, 0.0))
        good = np.isfinite(field.mag[band]) & (field.n_frames[band] >= LEAST_MEASUREMENTS) & (total <= LARGEST_ERR_MAG)
        mag[band], err[band] = np.where(good, field.mag[band], np.nan), np.where(good, total, np.nan)
        known |= good
    chosen = np.flatnonzero(known & steady)
    brightness = np.array([np.nanmin([mag[band][k] for band in bands]) for k in chosen])
    chosen = chosen[np.argsort(brightness, kind="stable")]
    match = cross_match(field.ra_deg[chosen], field.dec_deg[chosen], old.ra_deg, old.dec_deg, SAME_STAR_ARCSEC)
    taken: set[str] = set()
    ids: list[str] = []
    for n, k in enumerate(match, 1):
        star = old.ids[k] if k >= 0 and old.ids[k] not in taken else f"new{n:03d}"
        while star in taken or (k < 0 and star in old.ids):
            star += "x"
        taken.add(star)
        ids.append(star)
    return Sequence(
        clean_text(name, 60), tuple(ids), field.ra_deg[chosen], field.dec_deg[chosen],
        {band: mag[band][chosen] for band in bands}, {band: err[band][chosen] for band in bands},
    )  # fmt: skip
