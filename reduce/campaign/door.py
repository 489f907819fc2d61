"""One open campaign: create, open, show, reduce, decide, undo, note, export."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Self

from reduce.campaign.decide import decision_of
from reduce.campaign.frames_folder import FRAMES_FOLDER
from reduce.campaign.imports import points_of_file
from reduce.campaign.known import CampaignError, refuse_reference
from reduce.campaign.people import PROGRAM, who
from reduce.campaign.sequences import read_usable_sequence
from reduce.campaign.settings_file import SETTINGS_FILE, starter_text
from reduce.campaign.solved import Solved
from reduce.exchange.export import ExportFormat, write_points
from reduce.logbook.store import FILE_NAME, Logbook
from reduce.plain_text import clean_text
from reduce.records import Target
from reduce.settings import parse_settings, read_settings
from reduce.version import version
from reduce.views import FrameRow, LogRow, Plan, Snapshot

if TYPE_CHECKING:
    from reduce.campaign.reducer import Report

LOG_FILE = "fadeline.log"


def refuse_frames_folder(folder: Path) -> None:
    """Refuse, in one sentence, a folder that frames cannot come from."""
    if not folder.is_dir():
        shown = clean_text(folder, 300)
        raise CampaignError(f"The frames folder {shown} does not exist; make it, or correct the path.")
    if not str(folder.resolve()).isprintable():
        raise CampaignError(
            f"The frames folder {clean_text(folder, 300)} has a name with unprintable characters; rename it."
        )


class Campaign(Solved):
    """The one door for app, commands and scripts.

    Everything that is shown is solved from the logbook; a `Campaign` may be opened many times at once. What it knows is
    in `reduce.campaign.known`, what follows from that in `reduce.campaign.solved`.
    """

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
        refuse_frames_folder(frames)
        names = [target.name for target in targets]
        if not targets or len(set(names)) != len(names):
            raise CampaignError("Give at least one target, each with a name of its own.")
        for target in targets:
            refuse_reference(target, frames)
        stars = read_usable_sequence(sequence)
        text = settings_text if settings_text is not None else _starter(scale_arcsec, site)
        parse_settings(text, SETTINGS_FILE)  # a mistake is said before anything is made
        with Logbook.create(folder) as book:
            (folder / SETTINGS_FILE).write_text(text, encoding="utf-8")
            book.set_setting(FRAMES_FOLDER, str(frames.resolve()))
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

    # ---- pictures ----------------------------------------------------------------------------------------

    def frame_rows(self) -> tuple[FrameRow, ...]:
        """Every file of the campaign as tables show it."""
        from reduce.campaign.picture import frame_rows

        return frame_rows(self, self.solution())

    def snapshot(self) -> Snapshot:
        """The whole campaign for the faces."""
        from reduce.campaign.picture import take_snapshot

        return take_snapshot(self)

    def plan(self, now_mjd: float) -> Plan:
        """The night that runs at a time in UTC, or comes next: when what can be seen, and what is worth its time.

        Raises
        ------
        PlainError
            The settings name no site.
        """
        from reduce.campaign.planning import make_plan

        return make_plan(self, now_mjd)

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
        kind, _, name = subject.partition(":")
        if (kind, value) == ("host", "reference") and not self.target(name).reference_folder:
            raise CampaignError(
                f"{clean_text(name)} has no reference: name its folder with fadeline target --reference."
            )
        return self.book.decide(*decision_of(subject, aspect, value), reason, who())

    def correct_target(self, target: Target) -> bool:
        """New facts about a target; False when nothing is new."""
        before = self.target(target.name)
        refuse_reference(target, self.frames_folder)
        if not self.book.add_target(target):
            return False
        old, new = asdict(before), asdict(target)
        words = ", ".join(f"{name.replace('_', ' ')} {new[name]}" for name in new if new[name] != old[name])
        self.book.note(target.name, f"{target.name}: {words}.", who(), kind="event")
        return True

    def import_points(self, target: str, path: Path, source: str = "") -> int:
        """Keep another observatory's points of a target; how many were new. See `imports.points_of_file`."""
        longitude = self.settings.site.longitude_deg if self.settings.site is not None else None
        points = points_of_file(path, target, source, longitude)
        new = self.book.add_imported(points)
        if new:
            names = ", ".join(sorted({point.source for point in points}))
            self.book.note(
                target, f"{new} points of {names} imported from {clean_text(path.name)}.", who(), kind="event"
            )
        return new

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
    text = starter_text()
    if site is not None:
        text += "\n[site]\nlatitude_deg = {}\nlongitude_deg = {}\nheight_m = {}\n".format(*site)
    if scale_arcsec is not None:
        text += f"\n[camera]\nscale_arcsec = {scale_arcsec}\n"
    return text
