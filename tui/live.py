"""The app on a real campaign: pictures come from a worker, decisions go to the logbook, reduction runs elsewhere."""

from __future__ import annotations

import asyncio
import os
import signal
import sys
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from functools import lru_cache
from multiprocessing import get_context
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from reduce.campaign.decide import decision_of
from reduce.campaign.frames_folder import gone_sentence
from reduce.campaign.people import who
from reduce.logbook.store import FILE_NAME, Logbook
from reduce.plain_text import PlainError
from reduce.runner import end_with_parent, prepare_processes
from tui.clock import now_mjd
from tui.link import comes_over_ssh, is_slow, round_trip_s
from tui.preferences import Preferences, preferences_file, read_preferences
from tui.reducer_process import ReducerProcess
from tui.terminal import prepare_environment

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from reduce.campaign.door import Campaign
    from reduce.records import Image
    from reduce.views import LogRow, Plan, RadialProfile, Snapshot, StarReading
    from tui.preview_image import Laid, PreviewImage, Window

T = TypeVar("T")


class Lane:
    """One worker process for interactive work; a new one is made when it dies."""

    def __init__(self) -> None:
        self._pool: ProcessPoolExecutor | None = None

    async def run(self, function: Callable[..., T], *arguments: Any) -> T:
        """The function's value; it must be importable by name."""
        if self._pool is None:
            self._pool = ProcessPoolExecutor(1, get_context("forkserver"), initializer=end_with_parent)
        try:
            return await asyncio.get_running_loop().run_in_executor(self._pool, function, *arguments)
        except BrokenProcessPool:
            self._pool = None
            raise

    def close(self) -> None:
        """End the process, whatever it is doing."""
        if self._pool is not None:
            self._pool.shutdown(wait=False, cancel_futures=True)


_open: dict[str, Campaign] = {}
"""In a worker: the campaign stays open between two pictures."""


def picture(folder: str) -> Snapshot:
    """In a worker: the campaign now."""
    return _campaign(folder).snapshot()


def _campaign(folder: str) -> Campaign:
    from reduce.campaign.door import Campaign

    if folder not in _open:
        _open[folder] = Campaign.open(Path(folder))
    return _open[folder]


def change_setup(folder: str, subject: str, typed: str) -> str:
    """In a worker: change one thing of the setup."""
    from reduce.campaign.setup import change

    return change(_campaign(folder), subject, typed)


def add_target(folder: str, facts: Mapping[str, str]) -> str:
    """In a worker: follow one more target."""
    from reduce.campaign.setup import follow_target

    return follow_target(_campaign(folder), facts)


@lru_cache(maxsize=2)
def frame_pixels(folder: str, path: str) -> Image:
    """In a worker: a frame's raw counts; the two last ones stay, for zooming and going to and fro between them."""
    from reduce.frames.reader import open_frame
    from reduce.settings import read_settings

    return open_frame(Path(path), read_settings(Path(folder) / "observatory.toml")).read()


@lru_cache(maxsize=1)
def laid_pixels(folder: str, laid: Laid) -> Image:
    """In a worker: another frame on the pixels of the shown one."""
    from reduce.field.registered import registered

    return registered(frame_pixels(folder, laid.path), laid.own, laid.onto, laid.nx, laid.ny)


def night_plan(folder: str, now: float) -> Plan:
    """In a worker: the night ahead."""
    return _campaign(folder).plan(now)


def small_image(
    folder: str, path: str, nx: int, ny: int, window: Window | None = None, laid: Laid | None = None
) -> PreviewImage:
    """In a worker: a frame, or another one laid on its pixels, shrunk."""
    from tui.preview_image import shrink

    return shrink(frame_pixels(folder, path) if laid is None else laid_pixels(folder, laid), nx, ny, window)


def small_difference(
    folder: str, frame: str, target: str, size: tuple[int, int], nx: int, ny: int, window: Window | None
) -> PreviewImage:
    """In a worker: the difference about a target, shrunk."""
    from reduce.campaign.difference_image import difference_image
    from tui.preview_image import pasted, shrink

    left = difference_image(_campaign(folder), frame, target)
    return shrink(pasted(left.light_e, left.x0, left.y0, size), nx, ny, window)


def readings(folder: str, frame: str) -> tuple[StarReading, ...]:
    """In a worker: every measured star of a frame."""
    from reduce.campaign.star_readings import star_readings

    return star_readings(_campaign(folder), frame)


def profile_of(folder: str, path: str, x_px: float, y_px: float, radius_px: float) -> RadialProfile:
    """In a worker: light against distance from a position."""
    from reduce.measure.profile import radial_profile

    return radial_profile(frame_pixels(folder, path), x_px, y_px, radius_px)


class LiveDesk:
    """A `Desk` on a campaign folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._book = Logbook.open(folder)
        self._pictures, self._previews, self._plans = Lane(), Lane(), Lane()

    def stamp(self) -> int:
        """Grows with every change of the logbook."""
        return self._book.stamp()

    def frames_folder_gone(self) -> str:
        """One sentence when the frames folder is not there, '' when it is."""
        return gone_sentence(self._book)

    async def snapshot(self) -> Snapshot:
        """The whole campaign now."""
        return await self._pictures.run(picture, str(self.folder))

    def decide(self, subject: str, aspect: str, value: str, reason: str = "") -> None:
        """Append a decision."""
        self._book.decide(*decision_of(subject, aspect, value), reason, who())

    def undo(self) -> str:
        """Take the newest decision back."""
        return self._book.undo(who()).removeprefix("taken back: ")

    def note(self, target: str, body: str) -> None:
        """Append a note."""
        self._book.note(target, body, who())

    def search_log(self, text: str) -> tuple[LogRow, ...]:
        """Lines that hold these words."""
        return tuple(self._book.log(search=text, limit=500))

    async def change_setup(self, subject: str, typed: str) -> str:
        """Change one thing of the setup."""
        return await self._pictures.run(change_setup, str(self.folder), subject, typed)

    async def add_target(self, facts: Mapping[str, str]) -> str:
        """Follow one more target."""
        return await self._pictures.run(add_target, str(self.folder), dict(facts))

    async def plan(self) -> Plan:
        """The night that runs or comes next."""
        return await self._plans.run(night_plan, str(self.folder), now_mjd())

    async def preview(
        self, path: str, nx: int, ny: int, window: Window | None = None, laid: Laid | None = None
    ) -> PreviewImage:
        """A part of a frame's image, shrunk."""
        return await self._previews.run(small_image, str(self.folder), path, nx, ny, window, laid)

    async def difference(
        self, frame: str, target: str, size: tuple[int, int], nx: int, ny: int, window: Window | None = None
    ) -> PreviewImage:
        """The difference of a frame and its reference, shrunk."""
        return await self._pictures.run(small_difference, str(self.folder), frame, target, size, nx, ny, window)

    async def star_readings(self, frame: str) -> tuple[StarReading, ...]:
        """Every measured star of a frame."""
        return await self._pictures.run(readings, str(self.folder), frame)

    async def profile(self, path: str, x_px: float, y_px: float, radius_px: float) -> RadialProfile:
        """Light against distance from a position."""
        return await self._previews.run(profile_of, str(self.folder), path, x_px, y_px, radius_px)

    def close(self) -> None:
        """Free what is held."""
        self._pictures.close()
        self._previews.close()
        self._plans.close()
        self._book.close()


def _first_run(folder: Path) -> bool:
    """Whether the observer made a campaign."""
    from tui.first_run import FirstRunApp
    from tui.live_first_run import LiveFirstRun

    desk = LiveFirstRun(folder)
    app = FirstRunApp(desk)
    try:
        signal.signal(signal.SIGHUP, lambda *_: app.exit())
        app.run()
        return app.made
    finally:
        desk.close()


def _slow_link(preferences: Preferences) -> bool:
    """Whether to be sparing; the terminal is asked only when it stands elsewhere and nothing was chosen."""
    measured = None
    if preferences.slow_link == "auto" and comes_over_ssh(os.environ):
        measured = round_trip_s(sys.stdin.fileno(), sys.stdout.fileno())
    return is_slow(preferences.slow_link, os.environ, measured)


def run_app(folder: Path) -> None:
    """Open the app on a campaign and reduce what lands, until the user leaves or the line drops.

    In a folder without a campaign the first run comes before: it makes one.

    Raises
    ------
    PlainError
        There is no terminal, or the logbook cannot be used.
    """
    made = (folder / FILE_NAME).exists()
    if not (sys.stdin.isatty() and sys.stdout.isatty()):
        if not made:
            raise PlainError(
                f"{folder.resolve()} holds no campaign; try: fadeline demo, or make one with: fadeline new."
            )
        raise PlainError(f"The app needs a terminal; without one use: fadeline reduce {folder}")
    preferences = read_preferences(preferences_file(os.environ))
    prepare_environment(os.environ)
    prepare_processes(("reduce.campaign.picture",))
    if not made and not _first_run(folder):
        return
    from tui.app import FadelineApp

    desk = LiveDesk(folder)
    if sentence := desk.frames_folder_gone():
        print(f"fadeline: {sentence}", file=sys.stderr)  # the app says it too; here it stays readable afterwards
    app = FadelineApp(desk, preferences, _slow_link(preferences))
    reducer = ReducerProcess(folder, lambda sentence: app.say(sentence, trouble=True))
    try:
        signal.signal(signal.SIGHUP, lambda *_: app.exit())
        if os.access(folder, os.W_OK):  # elsewhere the campaign can only be looked at
            reducer.keep_running()
        app.run()
    finally:
        reducer.stop()
        desk.close()
