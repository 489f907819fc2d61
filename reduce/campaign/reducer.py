"""Reduce what has landed: look, build masters, measure, store, solve, estimate, report; once, or until stopped."""

from __future__ import annotations

import logging
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from logging.handlers import RotatingFileHandler
from pathlib import Path
from typing import TYPE_CHECKING, Any

from reduce.campaign.host_light import HostTask, free_of_host, refused
from reduce.campaign.intake import CALIBRATION, Intake
from reduce.campaign.people import PROGRAM
from reduce.campaign.setup import follow_settings, remember_settings
from reduce.logbook.host_light import HostRow
from reduce.logbook.lock import reducer_lock
from reduce.pipeline import Recipe, measure_frame
from reduce.plain_text import clean_text
from reduce.records import Measured, Point
from reduce.runner import TaskResult, prepare_processes, run_tasks
from reduce.views import FrameRow

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

FRAME_TIMEOUT_S = 300.0
PRELOAD = ("reduce.campaign.warm",)
"""Imported once in the server that workers are forked from."""
LOOK_EVERY_S = 0.5
"""An after-slew line within two seconds leaves no more: a frame must look the same twice."""
LOOK_AGAIN_S = 0.25
"""After a frame has landed that is to be seen twice."""
LOOK_SHARE = 0.1
"""Of the time, at most, that is spent looking: a folder on a slow disk is looked at less often."""
MOST_ATTEMPTS = 8
"""Starts of one frame that nobody ended: its reducer was killed or the machine went down, which need not be its fault.
A frame whose worker dies is given up earlier, see `reduce.runner.MOST_STARTS`."""
TOLD = "frames told of in the log"
"""Setting: how many, in the order they were first measured."""
MOVED_MAG = 0.001
"""A nightly point that moved by less is not worth a line."""

_log = logging.getLogger("fadeline")


@dataclass(frozen=True, slots=True)
class MeasureTask:
    """One frame to measure; travels to a worker process."""

    path: Path
    frame: str
    recipe: Recipe
    digest: str


def measure_task(task: MeasureTask) -> Measured:
    """What a worker does."""
    return measure_frame(task.path, task.frame, task.recipe)


@dataclass(frozen=True, slots=True)
class Report:
    """What one batch came to."""

    rows: tuple[dict[str, Any], ...]
    """One a frame: file, band, outcome, state, reason, seconds."""
    summary: dict[str, Any]
    sentence: str


def reduce_frames(
    campaign: Campaign,
    follow: bool,
    workers: int,
    progress: Callable[[str], None],
    should_stop: Callable[[], bool],
) -> Iterator[Report]:
    """Reduce the campaign's frames, one report a batch that changed something (at least one).

    Parameters
    ----------
    follow
        Look again and again until ``should_stop``.
    workers
        Processes that measure.
    progress
        Receives one short line at a time; "" clears it.

    Raises
    ------
    ReducerBusy
        Another process reduces this campaign.
    """
    _write_log_file(campaign.folder)
    if follow:
        prepare_processes(PRELOAD)  # the first frame of the night shall not wait for imports
    with reducer_lock(campaign.folder):
        first = True
        inputs: tuple[object, ...] = ()
        remember_settings(campaign)
        while True:
            started = time.monotonic()
            follow_settings(campaign)
            intake = campaign.intake
            changed = intake.look(progress, should_stop)
            looked_s = time.monotonic() - started
            inputs, before = campaign.inputs(), inputs
            if first or changed or inputs != before or campaign.wants_host_work():
                batch = _Batch(campaign, intake, workers, progress, should_stop)
                batch.run()
                progress("")
                yield batch.report(time.monotonic() - started, everything=first)
                first = False
            if not follow or should_stop():
                return
            pause_s = max(LOOK_AGAIN_S if intake.waiting else LOOK_EVERY_S, looked_s / LOOK_SHARE)
            _wait(LOOK_EVERY_S if changed else pause_s, should_stop)


def _wait(seconds: float, should_stop: Callable[[], bool]) -> None:
    end = time.monotonic() + seconds
    while time.monotonic() < end and not should_stop():
        time.sleep(0.05)


def _write_log_file(folder: Path) -> None:
    """Tracebacks behind one-sentence errors go to a file in the campaign's folder."""
    from reduce.campaign.door import LOG_FILE

    if _log.handlers:
        return
    handler = RotatingFileHandler(folder / LOG_FILE, maxBytes=1_000_000, backupCount=2, delay=True, encoding="utf-8")
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    _log.addHandler(handler)
    _log.setLevel(logging.INFO)
    _log.propagate = False


class _Batch:
    """Everything that wants measuring now."""

    def __init__(
        self,
        campaign: Campaign,
        intake: Intake,
        workers: int,
        progress: Callable[[str], None],
        should_stop: Callable[[], bool],
    ) -> None:
        self.campaign, self.intake, self.workers = campaign, intake, workers
        self.progress, self.should_stop = progress, should_stop
        self.measured: set[str] = set()
        self.done = self.total = 0

    def run(self) -> None:
        """Measure what is pending, then estimate every target."""
        tasks, again = self._tasks()
        before = self.campaign.curve_points() if again else ()
        if tasks:
            self._measure(tasks)
            # What was not recognised may be, now that other frames have shown the camera's scale.
            if not self.should_stop() and (second_look := self._tasks()[0]):
                self._measure(second_look)
        self._say_what_came()
        if self.measured & again:
            why = "calibration, settings or the target's place having changed"
            self._say_what_moved(f"{len(self.measured & again)} frames measured again, {why}", before)
        self._free_of_hosts(again)
        for target in self.campaign.targets():
            if self.should_stop():
                return
            self.progress(f"fitting {target.name}")
            self.campaign.estimate_nights(target.name)
            self.campaign.estimate(target.name, f"{len(self.measured)} frames measured" if self.measured else "")

    def _measure(self, tasks: list[MeasureTask]) -> None:
        book = self.campaign.book
        self.done, self.total = 0, len(tasks)
        self.progress(f"measuring {self.total} frames")
        run_tasks(
            measure_task,
            tasks,
            min(self.workers, len(tasks)),
            FRAME_TIMEOUT_S,
            self._take,
            before_start=lambda task: book.start_attempt(task.frame, task.digest) <= MOST_ATTEMPTS,
            should_stop=self.should_stop,
            preload=PRELOAD,
        )

    def _tasks(self) -> tuple[list[MeasureTask], set[str]]:
        """Frames without a measurement of their present recipe, and those of them that have an older one."""
        book = self.campaign.book
        frames = self.intake.known_frames()
        masters = self.intake.build_masters(frames, self.progress, self.should_stop)
        if self.should_stop():
            return [], set()
        self._say_what_is_refused()
        frames = self.intake.known_frames()  # with masters, a raw frame may stand for its calibrated copy
        targets, stars = tuple(self.campaign.targets()), self.campaign.astrometric()
        done = book.reductions_done()
        measured_once = {frame for frame, _ in done}
        tasks = []
        recipes = self.intake.recipes(frames, masters, targets, stars)
        for frame in frames:
            if frame.id not in recipes:
                continue
            recipe, digest = recipes[frame.id]
            if (frame.id, digest) not in done and frame.path.exists():
                tasks.append(MeasureTask(frame.path, frame.id, recipe, digest))
        return tasks, {task.frame for task in tasks} & measured_once

    def _take(self, result: TaskResult[MeasureTask, Measured]) -> None:
        book, task = self.campaign.book, result.task
        self.done += 1
        self.progress(f"measured {self.done} of {self.total} frames")
        if result.ending == "stopped":
            book.end_attempt(task.frame, task.digest, "stopped")
            return
        measured = result.value
        if measured is None:
            _log.error("%s: %s\n%s", task.path, result.sentence, result.detail)
            book.end_attempt(task.frame, task.digest, result.ending)
            reason = f"it could not be measured: {result.sentence} The log file holds the details."
            measured = Measured(task.frame, task.digest, "unreadable", reason, seconds=result.seconds)
        book.add_recipe(task.digest, task.recipe.content())
        book.add_reduction(measured)
        book.end_attempt(task.frame, task.digest, "done")
        self.measured.add(task.frame)

    def _say_what_is_refused(self) -> None:
        """One line in the log on each master that cannot be made, once."""
        said = {row.body for row in self.campaign.log()}
        for why in self.intake.refused.values():
            words = clean_text(f"No master could be made: {why}", 2000)
            if words not in said:
                self.campaign.book.note("", words, PROGRAM, kind="event")

    def _say_what_came(self) -> None:
        """One line a night in the log on frames measured for the first time, by a reducer killed before it told too."""
        book = self.campaign.book
        frames = book.frames_measured()
        new = set(frames[int(book.setting(TOLD) or 0) :])
        if not new:
            return
        nights: dict[str, list[FrameRow]] = {}
        picture = self.campaign.frame_rows()
        for row in picture:
            if row.id in new and row.kind == "light":
                nights.setdefault(row.night, []).append(row)
        for night, rows in sorted(nights.items()):
            counts = [f"{sum(row.state == state for row in rows)} {state}" for state in ("kept", "doubtful", "dropped")]
            words = f"Night {night}: {len(rows)} frames measured: {', '.join(counts)}."
            book.note("", words, PROGRAM, night=night, kind="event")
        references = sum(row.id in new and row.kind == "reference" for row in picture)
        if references:
            book.note("", f"{references} reference frames measured.", PROGRAM, kind="event")
        book.set_setting(TOLD, str(len(frames)))

    def _free_of_hosts(self, again: set[str]) -> None:
        """Take the hosts' light off where a reference, a position or a choice says how."""
        if self.should_stop():
            return
        tasks = self.campaign.host_tasks()
        if not tasks:
            return
        before = self.campaign.curve_points()
        self.done, self.total = 0, len(tasks)
        rows: list[HostRow] = []

        def take(result: TaskResult[HostTask, HostRow]) -> None:
            self.done += 1
            self.progress(f"host light of {self.done} of {self.total} frames")
            if result.value is not None:
                rows.append(result.value)
            elif result.ending != "stopped":
                _log.error("host light of %s: %s\n%s", result.task.key[:1], result.sentence, result.detail)
                rows.append(refused(result.task, f"The host's light could not be taken off: {result.sentence}"))

        run_tasks(free_of_host, tasks, min(self.workers, len(tasks)), FRAME_TIMEOUT_S, take,
                  should_stop=self.should_stop, preload=PRELOAD)  # fmt: skip
        self.campaign.book.add_host_rows(rows)
        earlier = [row for row in rows if row.frame in again or row.frame not in self.measured]
        if earlier:
            methods = sorted({row.host_light.method for row in earlier})
            self._say_what_moved(f"Host light taken off {len(earlier)} earlier frames ({', '.join(methods)})", before)

    def _say_what_moved(self, what: str, before: tuple[Point, ...]) -> None:
        """One line in the log when points are made of other numbers than before."""
        old = {(p.star, p.night, p.band): p.mag for p in before if p.mag is not None}
        moves = [
            abs(point.mag - old[key])
            for point in self.campaign.curve_points()
            if point.mag is not None and (key := (point.star, point.night, point.band)) in old
        ]
        moved = [move for move in moves if move > MOVED_MAG]
        words = (
            f"{len(moved)} of {len(moves)} nightly points moved by more than 1 mmag, at most {max(moved):.3f} mag"
            if moved
            else "no nightly point moved by more than 1 mmag"
        )
        self.campaign.book.note("", f"{what}: {words}.", PROGRAM, kind="event")

    # ---- report ------------------------------------------------------------------------------------------

    def report(self, seconds: float, everything: bool) -> Report:
        """Rows of all lights and unreadable files, or only of those that are new."""
        picture = self.campaign.frame_rows()
        durations = {row.frame: row.seconds for row in self.campaign.measured()}
        shown = [row for row in picture if row.kind not in (*CALIBRATION, "reference")]
        rows = [
            _row(row, durations.get(row.id))
            for row in shown
            if everything or row.id in self.measured or Path(row.path) in self.intake.just_refused
        ]
        rows += [
            {
                "file": clean_text(path.name),
                "band": None,
                "outcome": "waiting",
                "state": None,
                "reason": why,
                "seconds": None,
            }
            for path, why in sorted(self.intake.waiting.items())
        ]
        counts = {state: sum(row.state == state for row in shown) for state in ("kept", "doubtful", "dropped")}
        unreadable = sum(row.outcome == "unreadable" for row in shown)
        summary = {
            "frames": len(shown),
            "measured_now": len(self.measured),
            **counts,
            "unreadable": unreadable,
            "waiting": len(self.intake.waiting),
            "calibration": sum(row.outcome == "calibration" for row in picture),
            "reference": sum(row.kind == "reference" for row in picture),
            "seconds": round(seconds, 2),
        }
        sentence = (
            f"{len(shown)} frames: {counts['kept']} kept, {counts['doubtful']} doubtful, {counts['dropped']} dropped "
            f"({unreadable} of them unusable files); {len(self.measured)} measured now in {seconds:.0f} s."
        )
        if self.intake.waiting:
            sentence += f" {len(self.intake.waiting)} still being written."
        if self.should_stop():
            sentence += " Stopped before the rest; the next run goes on from here."
        sentence = " ".join([sentence, *self.campaign.unused_files()])
        return Report(tuple(rows), summary, sentence)


def _row(row: FrameRow, seconds: float | None) -> dict[str, Any]:
    return {
        "file": row.file,
        "band": row.band,
        "outcome": row.outcome,
        "state": row.state,
        "reason": row.reason,
        "seconds": None if seconds is None else round(seconds, 3),
    }
