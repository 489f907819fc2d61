"""What follows from a campaign's logbook now: points and estimates, kept until the logbook changes."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from pathlib import Path
from typing import Any

from reduce.campaign.estimates import assumptions_of, estimate_target, inputs_digest
from reduce.campaign.host_light import HostTask, Plans, host_plans, host_tasks, without_hosts
from reduce.campaign.imports import with_imported
from reduce.campaign.intake import KnownFrame
from reduce.campaign.known import Known
from reduce.campaign.standards import Calibrated, solve_with_standards
from reduce.candles.assumptions import Assumptions
from reduce.curve.comparison import star_points
from reduce.curve.light_curve import to_light_curve
from reduce.logbook.store import Logbook
from reduce.pipeline import solve_points
from reduce.plain_text import clean_text
from reduce.records import Caution, Choices, Estimate, LightCurve, Measured, Point, Solution, Target
from reduce.settings import Settings

MOST_NOTES = 3
SUPERNOVA_LIGHT = "light of the supernova itself"
"""Words of `reduce.measure.reference.supernova_light_note`."""


class Solved(Known):
    """Everything that is solved from the stored measurements and the decisions."""

    def __init__(self, folder: Path, book: Logbook, settings: Settings) -> None:
        super().__init__(folder, book, settings)
        self._solved: tuple[int, Solution, list[Measured]] | None = None
        self._standard_known: tuple[Any, Calibrated] | None = None
        self._host_missing: set[str] = set()

    def look_at_settings(self) -> bool:
        """As `Known.look_at_settings`; what was solved with the settings before is forgotten."""
        changed = super().look_at_settings()
        if changed:
            self._solved = self._standard_known = None
        return changed

    def measured(self) -> list[Measured]:
        """One stored measurement a frame, of the recipe in force where there is one."""
        return self._solve()[2]

    def solution(self) -> Solution:
        """Everything that follows from the stored measurements and the decisions, now."""
        return self._solve()[1]

    def _solve(self) -> tuple[int, Solution, list[Measured]]:
        stamp = self.book.measured_stamp()
        if self._solved is None or self._solved[0] != stamp:
            choices = self.book.choices()
            as_measured = self._science_rows()
            plans = self._host_plans(as_measured, choices)
            rows, self._host_missing = without_hosts(as_measured, plans, self.book)
            standard = self._standard(rows, choices).standard
            solution = solve_points(standard, self.targets(), choices, self.settings)
            nights = with_imported(solution.night_points, self.book.imported(), choices)
            solution = replace(solution, night_points=nights)
            self._solved = stamp, solution, rows
        return self._solved

    def _science_rows(self) -> list[Measured]:
        science = {frame.id for frame in self.known_frames() if _counts(frame) and not frame.is_reference}
        return [row for row in self.book.newest_reductions(self.wanted_recipes()) if row.frame in science]

    def reference_rows(self) -> list[Measured]:
        """The newest measurement of every reference frame, by time."""
        frames = {frame.id for frame in self.known_frames() if frame.is_reference and _counts(frame)}
        if not frames:
            return []
        return [row for row in self.book.newest_reductions(self.wanted_recipes()) if row.frame in frames]

    def _host_plans(self, rows: list[Measured], choices: Choices) -> Plans:
        bands = {row.info.band for row in rows if row.info is not None and row.info.band is not None}
        return host_plans(self.targets(), choices, self.reference_rows(), bands)

    def frames_with_host(self) -> set[str]:
        """Frames of which the host's light is still to be taken off."""
        self._solve()
        return self._host_missing

    def host_summary(self, target: str) -> list[str]:
        """How the host's light was taken off the frames of a target, one sentence a way, and what was noticed."""
        ways: Counter[str] = Counter()
        notes: Counter[str] = Counter()
        for row in self.measured():
            if (found := row.host_light.get(target)) is not None:
                ways[found.method] += 1
                notes.update(found.notes)
        return [f"{way}: {n} frames" for way, n in ways.most_common()] + [
            f"{note} ({n} frames)" for note, n in notes.most_common(8)
        ]

    def wants_host_work(self) -> bool:
        """Whether a reference, a position or a choice has changed since the last look."""
        return bool(self.frames_with_host())

    def host_tasks(self) -> list[HostTask]:
        """Targets on frames whose host's light is still to be taken off."""
        rows = self._science_rows()
        return host_tasks(rows, self._host_plans(rows, self.book.choices()), self.sequence(), self.book)

    def calibrated(self) -> Calibrated:
        """Every frame in the standard system, and the nights of standard stars."""
        return self._standard(self.measured(), self.book.choices())

    def _standard(self, rows: list[Measured], choices: Choices) -> Calibrated:
        """The standard system; kept, as most changes of the logbook leave it as it is."""
        key = (
            tuple((row.frame, row.recipe, row.stars[row.stars["role"] == 1].tobytes()) for row in rows),
            self.book.sequence_id(),
            replace(choices, excluded_points=frozenset()),
        )
        if self._standard_known is None or self._standard_known[0] != key:
            self._standard_known = (
                key,
                solve_with_standards(rows, self.sequence(), self.astrometric(), self.standards, choices, self.settings),
            )
        return self._standard_known[1]

    def curve(self, target: str, *, per_frame: bool = False, all_stars: bool = False) -> list[Point]:
        """Points of a target, by night or by frame, and on demand those of the comparison stars (by frame)."""
        solution = self.solution()
        points = [p for p in (solution.frame_points if per_frame else solution.night_points) if p.star == target]
        if all_stars:
            points += star_points(self.calibrated().standard, self.sequence())
        names = {frame.id: clean_text(frame.path.name) for frame in self.known_frames()}
        stale = self._stale_frames()
        groups = {p.zp_group for p in solution.frame_points if p.file in stale and p.star == target}
        return [
            replace(
                point,
                file=None if point.file is None else names.get(point.file, point.file),
                provisional=point.file in stale if point.file is not None else point.zp_group in groups,
            )
            for point in points
        ]

    def curve_points(self) -> tuple[Point, ...]:
        """Nightly points of all targets."""
        return self.solution().night_points

    def _stale_frames(self) -> set[str]:
        """Frames to be measured again, or whose host's light is still to be taken off."""
        wanted = self.wanted_recipes()
        measured = self.measured()
        return {row.frame for row in measured if row.recipe != wanted.get(row.frame, row.recipe)} | self._host_missing

    def light_curve(self, target: str) -> tuple[Target, LightCurve]:
        """A target and its nightly points as a fit takes them."""
        chosen = self.target(target)
        points = [point for point in self.solution().night_points if point.star == chosen.name]
        return chosen, to_light_curve(points)

    def estimate(self, target: str, why: str = "", assumptions: Assumptions | None = None) -> Estimate:
        """The distance of a target now; a new one joins the running history.

        Parameters
        ----------
        why
            What changed since the last estimate, in words; default: the newest line of the log.
        assumptions
            Other ones than the settings' make an estimate that does not join the history.
        """
        chosen = self.target(target)
        points = self.solution().night_points
        if assumptions is not None and assumptions != assumptions_of(self.settings):
            return self._with_host_cautions(estimate_target(chosen, points, assumptions))
        assumptions = assumptions_of(self.settings)
        digest = inputs_digest(chosen, points, assumptions)
        stored = self.book.estimate(chosen.name, digest)
        if stored is not None:
            found = stored
        else:
            found = self._with_host_cautions(estimate_target(chosen, points, assumptions))
        if not self.book.readonly and any(point.star == chosen.name for point in points):
            self.book.add_estimate(found, digest, why or self._what_changed(chosen.name))
        return found

    def estimate_nights(self, target: str) -> None:
        """Add to the running history, in order, the nights that are not in it yet: each as it stood that evening."""
        chosen = self.target(target)
        points = [point for point in self.solution().night_points if point.star == chosen.name]
        nights = sorted({point.night for point in points if not point.source})
        done = {row.why for row in self.book.history(chosen.name)}
        stands_on = assumptions_of(self.settings)
        for night in [night for night in nights if f"night {night}" not in done]:
            until = [point for point in points if point.night <= night]
            found = self._with_host_cautions(estimate_target(chosen, until, stands_on))
            self.book.add_estimate(found, inputs_digest(chosen, until, stands_on), f"night {night}")

    def _with_host_cautions(self, found: Estimate) -> Estimate:
        """What taking the host's light off has noticed, said where μ is read."""
        notes: Counter[str] = Counter()
        for row in self.measured():
            if (light := row.host_light.get(found.target)) is not None and light.taken_off:
                notes.update(light.notes)
        cautions = [Caution("host_light", note) for note, _ in notes.most_common(MOST_NOTES)]
        ways: dict[str, set[str]] = {}
        for point in self.solution().night_points:
            if point.star == found.target and point.state == "kept" and not point.source:
                ways.setdefault(point.band, set()).add(point.host_method)
        referred = sorted(band for band, methods in ways.items() if "reference" in methods)
        others = sorted(band for band, methods in ways.items() if "reference" not in methods)
        if referred and others:
            cautions.append(
                Caution(
                    "host_light_uneven",
                    f"{', '.join(referred)} had a reference taken off, {', '.join(others)} not: light of the host left "
                    "in some bands alone looks like another colour.",
                )
            )
        doubtful = any(SUPERNOVA_LIGHT in note for note in notes) or bool(referred and others)
        verdict = "μ is in doubt: see what is said of the host's light." if doubtful and found.mu is not None else ""
        return replace(found, warnings=(*found.warnings, *cautions), verdict=verdict or found.verdict)

    def _what_changed(self, target: str) -> str:
        history = self.book.history(target)
        if not history:
            return "first estimate"
        lines = [
            row for row in self.book.log(target=target, limit=5) if row.at >= history[-1].made_at and row.kind != "note"
        ]
        return lines[-1].body if lines else "settings or version"


def _counts(frame: KnownFrame) -> bool:
    """A light that no other file of the same exposure stands for."""
    return frame.info.kind == "light" and not frame.same_as
