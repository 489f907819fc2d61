"""Where a campaign's frames land: a row of its logbook, so that it can be said anew when a disk or a campaign moves."""

from __future__ import annotations

from pathlib import Path

from reduce.logbook.store import Logbook
from reduce.plain_text import clean_text

FRAMES_FOLDER = "frames folder"
"""Setting of the logbook."""


def frames_folder(book: Logbook) -> Path:
    """The folder named last."""
    return Path(book.setting(FRAMES_FOLDER) or ".")


def gone_sentence(book: Logbook) -> str:
    """One sentence when the frames folder is not there, '' when it is."""
    folder = frames_folder(book)
    if folder.is_dir():
        return ""
    return (
        f"The frames folder {clean_text(folder, 300)} is not there: mount its disk, or say in Setup where it is now; "
        "what was measured is safe."
    )
