"""Frames of standard fields among a campaign's frames: told apart, solved, and what they lend to the target's."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from datetime import date

import numpy as np

from reduce.almanac.times import night_of
from reduce.field.standards import standard_field
from reduce.records import Choices, FrameVerdict, Measured, Sequence
from reduce.settings import Settings
from reduce.standard import verdict as judge
from reduce.standard.frame_stars import FrameStars, frame_stars
from reduce.standard.solve import StandardSolution, solve_standard
from reduce.standard.transformation import Transformation, solve_transformations


@dataclass(frozen=True, slots=True)
class Calibrated:
    """The target's frames in the standard system, and the nights of standards beside them."""

    standard: StandardSolution
    """Verdicts of the frames of standards are among its verdicts."""
    transformations: tuple[Transformation, ...] = ()
    of_standards: frozenset[str] = field(default_factory=frozenset)
    """Frames that show a standard field."""


def solve_with_standards(
    rows: Iterable[Measured],
    sequence: Sequence,
    own_field: Sequence,
    standards: Sequence,
    choices: Choices,
    settings: Settings,
) -> Calibrated:
    """Solve the standard fields first, then the target's frames with the colour terms that these give.

    Parameters
    ----------
    rows
        All science frames.
    sequence, own_field, standards
        Comparison stars; the stars by which the campaign's own field is recognised; published standards.
    """
    own: list[Measured] = []
    theirs: list[Measured] = []
    for row in rows:
        shows = row.info is not None and standard_field(row.info, standards, own_field) is not None
        (theirs if shows else own).append(row)
    verdicts: dict[str, FrameVerdict] = {
        row.frame: judge.verdict_without_measurement(row, choices) for row in theirs if row.outcome != "measured"
    }
    measured = [(row, _stars_of(row, standards, settings)) for row in theirs if row.outcome == "measured"]
    verdicts |= _looks([frame for _, frame in measured], choices)
    kept = [pair for pair in measured if verdicts[pair[0].frame].state == "kept"]
    transformations = solve_transformations(
        kept or [pair for pair in measured if verdicts[pair[0].frame].state != "dropped"], standards, settings
    )
    for solved in transformations:
        for frame, why in solved.frames_set_aside.items():
            if not verdicts[frame].by_person:
                verdicts[frame] = FrameVerdict(frame, "dropped", (*verdicts[frame].reasons, why))
    solution = solve_standard(own, sequence, choices, settings, known_terms(transformations, own))
    return Calibrated(
        replace(solution, verdicts={**solution.verdicts, **verdicts}),
        transformations,
        frozenset(row.frame for row in theirs),
    )


def _stars_of(row: Measured, standards: Sequence, settings: Settings) -> FrameStars:
    assert row.info is not None
    assert row.info.mjd_mid is not None
    longitude = settings.site.longitude_deg if settings.site is not None else None
    return frame_stars(row, standards, night_of(row.info.mjd_mid, longitude))


def _looks(frames: list[FrameStars], choices: Choices) -> dict[str, FrameVerdict]:
    """What the images themselves say, each camera and band by its own measure."""
    groups: dict[tuple[str, str], list[FrameStars]] = {}
    for frame in frames:
        groups.setdefault(frame.group, []).append(frame)
    found = {}
    for members in groups.values():
        usual = judge.usual_fwhm_px([frame.quality for frame in members])
        for frame in members:
            found[frame.frame] = judge.verdict(frame.frame, judge.image_findings(frame.quality, usual), choices)
    return found


def known_terms(
    transformations: Iterable[Transformation], rows: Iterable[Measured]
) -> Mapping[tuple[str, str], tuple[float, float]]:
    """Camera, band → colour term and error of the season of standards nearest in time to the target's frames."""
    days: dict[tuple[str, str], list[float]] = {}
    for row in rows:
        if row.info is not None and row.info.band is not None and row.info.mjd_mid is not None:
            days.setdefault((row.info.camera, row.info.band), []).append(row.info.mjd_mid)
    best: dict[tuple[str, str], tuple[float, Transformation]] = {}
    for solved in transformations:
        key = (solved.camera, solved.band)
        if not solved.term_fitted or key not in days:
            continue
        middle = float(np.median(days[key]))
        away = min(abs(_mjd(night.night) - middle) for night in solved.nights)
        if key not in best or away < best[key][0]:
            best[key] = away, solved
    return {key: (solved.term, solved.term_err) for key, (_, solved) in best.items()}


def _mjd(night: str) -> float:
    return date.fromisoformat(night).toordinal() - 678576.0
