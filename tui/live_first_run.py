"""The first run on a real folder: everything that reads headers or checks runs in another process."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from tui.live import Lane

if TYPE_CHECKING:
    from reduce.views import FolderSurvey


def survey(frames: Path, settings: Mapping[str, str]) -> FolderSurvey:
    """In a worker: what lies in a folder."""
    from reduce.campaign import first_run

    return first_run.survey(frames, settings)


def check_settings(settings: Mapping[str, str]) -> None:
    """In a worker: whether these values can be."""
    from reduce.campaign import first_run

    first_run.check_settings(settings)


def check_target(facts: Mapping[str, str]) -> str:
    """In a worker: the target as understood."""
    from reduce.campaign import first_run

    return first_run.check_target(facts)


def check_stars(path: Path, facts: Mapping[str, str]) -> str:
    """In a worker: what a file of comparison stars holds."""
    from reduce.campaign import first_run

    return first_run.check_stars(path, facts)


def begin(folder: Path, frames: Path, stars: Path, facts: Mapping[str, str], settings: Mapping[str, str]) -> None:
    """In a worker: make the campaign."""
    from reduce.campaign import first_run

    first_run.begin(folder, frames, stars, facts, settings)


class LiveFirstRun:
    """A `tui.desk.FirstRunDesk` on a folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._lane = Lane()

    async def survey(self, frames: Path, settings: Mapping[str, str]) -> FolderSurvey:
        """What lies in a frames folder."""
        return await self._lane.run(survey, frames, dict(settings))

    async def check_settings(self, settings: Mapping[str, str]) -> None:
        """Whether these values can be."""
        await self._lane.run(check_settings, dict(settings))

    async def check_target(self, facts: Mapping[str, str]) -> str:
        """The target as it was understood."""
        return await self._lane.run(check_target, dict(facts))

    async def check_stars(self, path: Path, facts: Mapping[str, str]) -> str:
        """What a file of comparison stars holds."""
        return await self._lane.run(check_stars, path, dict(facts))

    async def begin(self, frames: Path, stars: Path, facts: Mapping[str, str], settings: Mapping[str, str]) -> None:
        """Make the campaign."""
        await self._lane.run(begin, self.folder, frames, stars, dict(facts), dict(settings))

    def close(self) -> None:
        """Free what is held."""
        self._lane.close()
