"""What the app needs of a campaign; the app knows nothing else of the science."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from reduce.views import FolderSurvey, LogRow, Plan, RadialProfile, Snapshot, StarReading
    from tui.preview_image import Laid, PreviewImage, Window


class Desk(Protocol):
    """One open campaign. Plain methods are short and called from threads; async ones may take long."""

    folder: Path

    def stamp(self) -> int:
        """Cheap; grows with every change of the logbook."""

    async def snapshot(self) -> Snapshot:
        """The whole campaign now, made in another process."""

    def decide(self, subject: str, aspect: str, value: str, reason: str = "") -> None:
        """Append a decision.

        Subjects and values: ``frame:<id>`` state keep|drop; ``star:<id>`` use "set aside"|use;
        ``point:<target>:<night>:<band>`` exclude yes|no; ``aperture:<band>`` fwhm <number>|auto.
        """

    def undo(self) -> str:
        """Take the last decision back; its words, or "" when there was nothing."""

    def note(self, target: str, body: str) -> None:
        """Append a note to the observing log."""

    def search_log(self, text: str) -> tuple[LogRow, ...]:
        """Lines of the log that hold these words."""

    async def change_setup(self, subject: str, typed: str) -> str:
        """Change one thing of the setup as it was typed; the words for it, or one sentence raised.

        Subjects: ``setting:<key of observatory.toml>``, ``frames folder``, ``sequence`` (a file), and
        ``target:<name>:<fact>``.
        """

    async def add_target(self, facts: Mapping[str, str]) -> str:
        """Follow one more target; the words for it, or one sentence raised."""

    async def plan(self) -> Plan:
        """The night that runs or comes next, made in another process; one sentence raised where it cannot be."""

    async def preview(
        self, path: str, nx: int, ny: int, window: Window | None = None, laid: Laid | None = None
    ) -> PreviewImage:
        """A window of the frame, or all of it, shrunk to at most nx × ny in another process.

        With ``laid`` another frame is shown instead, on the pixels of this one.
        """

    async def difference(
        self, frame: str, target: str, size: tuple[int, int], nx: int, ny: int, window: Window | None = None
    ) -> PreviewImage:
        """The same of what is left about a target when the reference is taken off; ``size`` is the frame's."""

    async def star_readings(self, frame: str) -> tuple[StarReading, ...]:
        """Every measured star of a frame."""

    async def profile(self, path: str, x_px: float, y_px: float, radius_px: float) -> RadialProfile:
        """Light against distance from a position of a frame."""

    def close(self) -> None:
        """Free what is held."""


class FirstRunDesk(Protocol):
    """A folder that holds no campaign yet. Everything raises one sentence where what was typed cannot be."""

    folder: Path

    async def survey(self, frames: Path, settings: Mapping[str, str]) -> FolderSurvey:
        """What lies in a frames folder; ``settings`` are keys of observatory.toml as typed so far."""

    async def check_settings(self, settings: Mapping[str, str]) -> None:
        """Whether these values can be."""

    async def check_target(self, facts: Mapping[str, str]) -> str:
        """The target as it was understood."""

    async def check_stars(self, path: Path, facts: Mapping[str, str]) -> str:
        """What a file of comparison stars holds, for this target."""

    async def begin(self, frames: Path, stars: Path, facts: Mapping[str, str], settings: Mapping[str, str]) -> None:
        """Make the campaign."""

    def close(self) -> None:
        """Free what is held."""
