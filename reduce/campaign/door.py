"""One open campaign: create, open, reduce, curve, distance, decide, undo, note, export."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from functools import cached_property
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

from reduce.campaign.decide import decision_of
from reduce.campaign.estimates import estimate_target, inputs_digest
from reduce.campaign.intake import Intake, KnownFrame
from reduce.campaign.people import PROGRAM, who
from reduce.campaign.targets import TargetError
from reduce.curve.comparison import star_points
from reduce.exchange.export import ExportFormat, write_points
from reduce.field.sequence import SequenceError, read_sequence
from reduce.logbook.store import FILE_NAME, Logbook
from reduce.pipeline import solve_points
from reduce.plain_text import PlainError, clean_text
from reduce.records import BANDS, Choices, Estimate, Measured, Point, Solution, Target
from reduce.records import Sequence as ComparisonSequence
from reduce.settings import Settings, parse_settings, read_settings
from reduce.standard.solve import StandardSolution, solve_standard
from reduce.version import version
from reduce.views import FrameRow, LogRow, Snapshot

if TYPE_CHECKING:
    from reduce.campaign.reducer import Report

SETTINGS_FILE = "observatory.toml"
LOG_FILE = "fadeline.log"
FEWEST_STARS = 3


class CampaignError(PlainError):
    """A campaign cannot be made, opened or asked this."""


class Campaign:
    """The one door for app, commands and scripts.

    Everything that is shown is solved from the logbook; a `Campaign` may be opened many times at once.
    """

    def __init__(self, folder: Path, book: Logbook, settings: Settings) -> None:
        self.folder, self.book, self.settings = folder, book, settings
        self._solved: tuple[int, Solution, list[Measured]] | None = None
        self._standard_known: tuple[Any, StandardSolution] | None = None

    # ---- make and open -----------------------------------------------------------------------------------

    @classmethod
    def create(
        cls,
        folder: Path,
        frames: Path,
        sequence: Path,
        targets: Sequence[Target],
        *,
        scale_arcsec: float | None = None,
        site: Sequence[float] | None = None,
        settings_text: str | None = None,
    ) -> Self:
        """A new campaign in a folder.

        Parameters
        ----------
        frames
            Folder that holds, or will hold, the frames.
        sequence
            Comparison stars as CSV.
        scale_arcsec, site
            Pixel scale (unbinned) and latitude, longitude (degrees), height (m), written into observatory.toml.
        settings_text
            A whole observatory.toml instead of the starter file.

        Raises
        ------
        PlainError
            One sentence; nothing was made then, apart from an empty folder.
        """
        if (folder / FILE_NAME).exists():
            raise CampaignError(f"{folder} holds a campaign already; open it, or choose another folder.")
        if not frames.is_dir():
            raise CampaignError(f"The frames folder {frames} does not exist; make it, or correct the path.")
        if not str(frames.resolve()).isprintable():
            raise CampaignError(
                f"The frames folder {clean_text(frames, 300)} has a name with unprintable characters; rename it."
            )
        names = [target.name for target in targets]
        if not targets or len(set(names)) != len(names):
            raise CampaignError("Give at least one target, each with a name of its own.")
        stars = read_sequence(sequence)
        _refuse_poor_sequence(stars, sequence)
        text = settings_text if settings_text is not None else _starter(scale_arcsec, site)
        parse_settings(text, SETTINGS_FILE)  # a mistake is said before anything is made
        with Logbook.create(folder) as book:
            (folder / SETTINGS_FILE).write_text(text, encoding="utf-8")
            book.set_setting("frames folder", str(frames.resolve()))
            book.set_setting("version", version())
            book.add_sequence(stars)
            for target in targets:
                book.add_target(target)
            followed = ", ".join(names)
            book.note("", f"Campaign made for {followed}; frames in {frames}.", PROGRAM, kind="event")
        return cls.open(folder)

    @classmethod
    def open(cls, folder: Path) -> Self:
        """The campaign of a folder.

        Raises
        ------
        PlainError
            There is none, or its logbook or settings cannot be used.
        """
        if not (folder / FILE_NAME).exists():
            raise CampaignError(
                f"{folder.resolve()} holds no campaign; make one with: fadeline new {folder} --frames … (see --help)."
            )
        settings = read_settings(folder / SETTINGS_FILE)
        book = Logbook.open(folder)
        if not book.targets():
            book.close()
            raise CampaignError(f"{folder.resolve()} was never finished; remove it and make the campaign again.")
        return cls(folder, book, settings)

    # ---- what is known -----------------------------------------------------------------------------------

    def targets(self) -> list[Target]:
        """What is followed."""
        return self.book.targets()

    def target(self, name: str | None) -> Target:
        """The target of this name (case and blanks do not matter), or the first when no name is given."""
        targets = self.targets()
        if name is None:
            return targets[0]
        for target in targets:
            if target.name.casefold().replace(" ", "") == name.casefold().replace(" ", ""):
                return target
        known = ", ".join(target.name for target in targets)
        raise TargetError(f"There is no target {clean_text(name)!r}; there is {known}.")

    def sequence(self) -> ComparisonSequence:
        """The comparison sequence in force."""
        sequence = self.book.current_sequence()
        if sequence is None:
            raise CampaignError(f"{self.folder} has no comparison sequence.")
        return sequence

    def sequence_notes(self) -> list[str]:
        """What an observer should know of the comparison sequence."""
        stars = self.sequence()
        counts = {band: int((stars.mag[band] == stars.mag[band]).sum()) for band in BANDS if band in stars.mag}
        shown = ", ".join(f"{band} {n}" for band, n in counts.items())
        return [f"Comparison sequence of {len(stars)} stars ({shown})."]

    @cached_property
    def frames_folder(self) -> Path:
        """Where frames land."""
        return Path(self.book.setting("frames folder") or ".")

    @property
    def reference_folders(self) -> tuple[Path, ...]:
        """Frames in them are never science."""
        return tuple(Path(t.reference_folder) for t in self.targets() if t.reference_folder)

    def missing_settings(self) -> list[str]:
        """Settings without which something is left undone, one sentence each."""
        found = []
        if self.settings.site is None:
            found.append(
                f"{SETTINGS_FILE} names no [site]: airmass, twilight, extinction and the light-travel time across "
                "the Earth are left out."
            )
        elif self.settings.telescope.aperture_m is None:
            found.append(f"{SETTINGS_FILE} gives no telescope aperture_m: scintillation is left out of the errors.")
        return found

    def known_frames(self) -> list[KnownFrame]:
        """Every readable frame of the logbook, by time."""
        return self.intake.known_frames()

    def unused_files(self) -> list[str]:
        """One sentence when files were read that are neither light nor calibration frames."""
        names = [clean_text(frame.path.name) for frame in self.known_frames() if frame.info.kind == "unknown"]
        if not names:
            return []
        files_are = "file is" if len(names) == 1 else "files are"
        return [
            f"{len(names)} {files_are} not used, being neither light nor calibration frames by header or name "
            f"({names[0]}{', …' if len(names) > 1 else ''}); fadeline inspect says why."
        ]

    @cached_property
    def intake(self) -> Intake:
        """The campaign's files."""
        masters = self.folder / "masters"
        return Intake(self.book, self.settings, self.frames_folder, self.reference_folders, masters)

    def wanted_recipes(self) -> dict[str, str]:
        """Frame id → digest of the recipe it should have, with the masters that stand now."""
        return self.intake.wanted_recipes(self.known_frames(), tuple(self.targets()), self.sequence())

    def calibration_sentences(self) -> tuple[tuple[str, ...], list[str]]:
        """One sentence per kind of master there is; one per kind that measured lights lack."""
        return self.intake.calibration_sentences(self.known_frames())

    # ---- solved values -----------------------------------------------------------------------------------

    def measured(self) -> list[Measured]:
        """One stored measurement a frame, of the recipe in force where there is one."""
        return self._solve()[2]

    def solution(self) -> Solution:
        """Everything that follows from the stored measurements and the decisions, now."""
        return self._solve()[1]

    def _solve(self) -> tuple[int, Solution, list[Measured]]:
        stamp = self.book.stamp()
        if self._solved is None or self._solved[0] != stamp:
            science = {frame.id for frame in self.known_frames() if frame.info.kind == "light"}
            rows = [m for m in self.book.newest_reductions(self.wanted_recipes()) if m.frame in science]
            choices = self.book.choices()
            standard = self._standard(rows, choices)
            solution = solve_points(standard, self.targets(), choices, self.settings)
            self._solved = stamp, solution, rows
        return self._solved

    def _standard(self, rows: list[Measured], choices: Choices) -> StandardSolution:
        """The standard system; kept, as most changes of the logbook leave it as it is."""
        key = (
            tuple((row.frame, row.recipe) for row in rows),
            self.book.sequence_id(),
            replace(choices, excluded_points=frozenset()),
        )
        if self._standard_known is None or self._standard_known[0] != key:
            self._standard_known = key, solve_standard(rows, self.sequence(), choices, self.settings)
        return self._standard_known[1]

    def curve(self, target: str, *, per_frame: bool = False, all_stars: bool = False) -> list[Point]:
        """Points of a target, by night or by frame, and on demand those of the comparison stars (by frame)."""
        solution = self.solution()
        points = [p for p in (solution.frame_points if per_frame else solution.night_points) if p.star == target]
        if all_stars:
            points += star_points(self._standard(self.measured(), self.book.choices()), self.sequence())
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

    def frame_rows(self) -> tuple[FrameRow, ...]:
        """Every file of the campaign as tables show it."""
        from reduce.campaign.picture import frame_rows

        return frame_rows(self, self.solution())

    def _stale_frames(self) -> set[str]:
        wanted = self.wanted_recipes()
        return {row.frame for row in self.measured() if row.recipe != wanted.get(row.frame, row.recipe)}

    def estimate(self, target: str, why: str = "") -> Estimate:
        """The distance of a target now; a new one joins the running history.

        Parameters
        ----------
        why
            What changed since the last estimate, in words; default: the newest line of the log.
        """
        chosen = self.target(target)
        points = self.solution().night_points
        digest = inputs_digest(chosen, points)
        stored = self.book.estimate(chosen.name, digest)
        if stored is not None:
            found = stored
        else:
            found = estimate_target(chosen, points)
        if not self.book.readonly and any(point.star == chosen.name for point in points):
            self.book.add_estimate(found, digest, why or self._what_changed(chosen.name))
        return found

    def estimate_nights(self, target: str) -> None:
        """Add to the running history, in order, the nights that are not in it yet: each as it stood that evening."""
        chosen = self.target(target)
        points = [point for point in self.solution().night_points if point.star == chosen.name]
        nights = sorted({point.night for point in points})
        done = {row.why for row in self.book.history(chosen.name)}
        for night in [night for night in nights if f"night {night}" not in done]:
            until = [point for point in points if point.night <= night]
            self.book.add_estimate(estimate_target(chosen, until), inputs_digest(chosen, until), f"night {night}")

    def _what_changed(self, target: str) -> str:
        history = self.book.history(target)
        if not history:
            return "first estimate"
        lines = [
            row for row in self.book.log(target=target, limit=5) if row.at >= history[-1].made_at and row.kind != "note"
        ]
        return lines[-1].body if lines else "settings or version"

    def snapshot(self) -> Snapshot:
        """The whole campaign for the faces."""
        from reduce.campaign.picture import take_snapshot

        return take_snapshot(self)

    # ---- work --------------------------------------------------------------------------------------------

    def reduce(
        self,
        *,
        follow: bool = False,
        workers: int | None = None,
        progress: Callable[[str], None] = lambda text: None,
        should_stop: Callable[[], bool] = lambda: False,
    ) -> Iterator[Report]:
        """Reduce what has landed, one report a batch; with ``follow`` until stopped. See `reducer.reduce_frames`.

        Raises
        ------
        CampaignError
            The frames folder is gone; with ``follow`` it is waited for.
        """
        from reduce.campaign.reducer import reduce_frames

        if not follow and not self.frames_folder.is_dir():
            raise CampaignError(
                f"The frames folder {clean_text(self.frames_folder, 300)} is not there; "
                "mount its disk or put it back, what was measured is safe."
            )
        return reduce_frames(self, follow, workers or os.cpu_count() or 1, progress, should_stop)

    def decide(self, subject: str, aspect: str, value: str, reason: str = "") -> LogRow:
        """Append a decision in the words of the app (see `decide.decision_of`)."""
        return self.book.decide(*decision_of(subject, aspect, value), reason, who())

    def undo(self) -> str:
        """Take the newest standing decision back; its words, or '' when there is none."""
        return self.book.undo(who())

    def note(self, target: str, body: str) -> LogRow:
        """Write into the observing log."""
        return self.book.note(target, body, who())

    def log(self, search: str | None = None, target: str | None = None) -> list[LogRow]:
        """Lines of the observing log, oldest first."""
        return self.book.log(search=search, target=target)

    def export(self, target: str, path: Path | None, style: ExportFormat, *, per_frame: bool = False) -> int:
        """Write a target's points as ``ecsv`` or ``csv``; the number of points."""
        points = self.curve(target, per_frame=per_frame)
        meta = {
            "observatory": clean_text(self.settings.site.name) if self.settings.site else "",
            "version": version(),
        }
        write_points(points, self.target(target), path if path is not None else sys.stdout, style, meta)
        return len(points)


def _starter(scale_arcsec: float | None, site: Sequence[float] | None) -> str:
    text = (files("reduce") / "_config" / SETTINGS_FILE).read_text(encoding="utf-8").rstrip() + "\n"
    if site is not None:
        text += "\n[site]\nlatitude_deg = {}\nlongitude_deg = {}\nheight_m = {}\n".format(*site)
    if scale_arcsec is not None:
        text += f"\n[camera]\nscale_arcsec = {scale_arcsec}\n"
    return text


def _refuse_poor_sequence(stars: ComparisonSequence, path: Path) -> None:
    if len(stars) < FEWEST_STARS:
        raise SequenceError(f"{path} holds {len(stars)} stars; at least {FEWEST_STARS} are needed to find the field.")
