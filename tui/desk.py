"""What the app needs of a campaign; the app knows nothing else of the science."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from reduce.views import LogRow, Snapshot
    from tui.preview_image import PreviewImage


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

    async def preview(self, path: str, nx: int, ny: int) -> PreviewImage:
        """The frame's image, shrunk to at most nx × ny in another process."""

    def close(self) -> None:
        """Free what is held."""
