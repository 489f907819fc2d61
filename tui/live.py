"""The app on a real campaign: pictures come from a worker, decisions go to the logbook, reduction runs elsewhere."""

from __future__ import annotations

import asyncio
import os
import signal
import sys
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from reduce.campaign.decide import decision_of
from reduce.campaign.people import who
from reduce.logbook.store import FILE_NAME, Logbook
from reduce.plain_text import PlainError
from reduce.runner import end_with_parent, prepare_processes
from tui.reducer_process import ReducerProcess
from tui.terminal import prepare_environment

if TYPE_CHECKING:
    from collections.abc import Callable

    from reduce.campaign.door import Campaign
    from reduce.views import LogRow, Snapshot
    from tui.preview_image import PreviewImage

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
    from reduce.campaign.door import Campaign

    if folder not in _open:
        _open[folder] = Campaign.open(Path(folder))
    return _open[folder].snapshot()


def small_image(folder: str, path: str, nx: int, ny: int) -> PreviewImage:
    """In a worker: a frame, shrunk."""
    from reduce.frames.reader import open_frame
    from reduce.settings import read_settings
    from tui.preview_image import shrink

    return shrink(open_frame(Path(path), read_settings(Path(folder) / "observatory.toml")).read(), nx, ny)


class LiveDesk:
    """A `Desk` on a campaign folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._book = Logbook.open(folder)
        self._pictures, self._previews = Lane(), Lane()

    def stamp(self) -> int:
        """Grows with every change of the logbook."""
        return self._book.stamp()

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

    async def preview(self, path: str, nx: int, ny: int) -> PreviewImage:
        """A frame's image, shrunk."""
        return await self._previews.run(small_image, str(self.folder), path, nx, ny)

    def close(self) -> None:
        """Free what is held."""
        self._pictures.close()
        self._previews.close()
        self._book.close()


def run_app(folder: Path) -> None:
    """Open the app on a campaign and reduce what lands, until the user leaves or the line drops.

    Raises
    ------
    PlainError
        The folder holds no campaign.
    """
    if not (folder / FILE_NAME).exists():
        raise PlainError(f"{folder.resolve()} holds no campaign; try: fadeline demo, or make one with: fadeline new.")
    if not (sys.stdin.isatty() and sys.stdout.isatty()):
        raise PlainError(f"The app needs a terminal; without one use: fadeline reduce {folder}")
    prepare_environment(os.environ)
    prepare_processes(("reduce.campaign.picture",))
    from tui.app import FadelineApp

    desk = LiveDesk(folder)
    app = FadelineApp(desk)
    reducer = ReducerProcess(folder, lambda sentence: app.say(sentence, trouble=True))
    try:
        signal.signal(signal.SIGHUP, lambda *_: app.exit())
        if os.access(folder, os.W_OK):  # elsewhere the campaign can only be looked at
            reducer.keep_running()
        app.run()
    finally:
        reducer.stop()
        desk.close()
