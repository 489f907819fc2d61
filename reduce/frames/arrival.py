"""Which files of a folder are frames, and whether they are whole: by looking, so that it works on local disks and
network file systems alike. When a whole file may be taken is the campaign's to say (`reduce.campaign.intake`).
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

from reduce.frames.extent import CutShort, declared_units
from reduce.records import FrameError

SUFFIXES = (".fits", ".fit", ".fts")
PACKINGS = ("", ".fz", ".gz")

Stamp = tuple[int, int]
"""Size in bytes, modification time in ns."""


def is_candidate(name: str) -> bool:
    """A FITS name that is not hidden; half-written files of copying programs (``.part``) have another suffix."""
    lower = name.lower()
    return not name.startswith(".") and lower.endswith(tuple(s + p for s in SUFFIXES for p in PACKINGS))


def scan(folder: Path) -> dict[Path, Stamp]:
    """Candidates below a folder by path, with their stamps; what vanishes meanwhile is left out."""
    return dict(sorted(_scan(folder)))


def _scan(folder: Path) -> Iterator[tuple[Path, Stamp]]:
    for place, folders, names in os.walk(folder):
        folders[:] = [name for name in folders if not name.startswith(".")]
        for name in names:
            if is_candidate(name):
                path = Path(place, name)
                try:
                    # A link to nothing is found, so that it is said, not passed over.
                    stat = path.stat() if path.exists() else path.lstat()
                except OSError:
                    continue
                yield path, (stat.st_size, stat.st_mtime_ns)


def completeness(path: Path) -> str | None:
    """What a file lacks that may still be written, in one sentence; None for a whole file and for no FITS file."""
    try:
        declared_units(path)
    except CutShort as error:
        return str(error)
    except FrameError:
        return None
    return None
