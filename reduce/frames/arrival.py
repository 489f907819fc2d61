"""Which files of a folder are whole: polling, so that it works on local disks and network file systems alike.

A file is taken when size and modification time were the same on successive looks and the size is what its own headers
declare; a file packed by gzip declares nothing outside, so it must also have rested for a while. A stuck file is shown
with its reason.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from reduce.frames.extent import CutShort, declared_units
from reduce.records import FrameError

SUFFIXES = (".fits", ".fit", ".fts")
PACKINGS = ("", ".fz", ".gz")
GZIP_REST_S = 10.0

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


@dataclass(slots=True)
class _Seen:
    stamp: Stamp
    since_s: float
    same: int = 0
    taken: bool = False
    lacks: str = ""


class Poller:
    """Gives each whole file once, and again when it changed; files that lie there already count like new ones.

    Parameters
    ----------
    folder
        Watched with everything below it.
    settle
        Successive looks with the same stamp that are needed.
    rest_s
        Also wait until the file has not changed for so long; for writers that reserve the whole size first and pause.
    clock
        Monotonic seconds.
    """

    def __init__(
        self, folder: Path, settle: int = 2, rest_s: float = 0.0, clock: Callable[[], float] = time.monotonic
    ) -> None:
        self.folder, self.settle, self.rest_s, self.clock = folder, settle, rest_s, clock
        self._seen: dict[Path, _Seen] = {}

    def poll(self) -> list[Path]:
        """Look once; files that became whole since the last look, by path."""
        found, now = scan(self.folder), self.clock()
        for gone in self._seen.keys() - found.keys():
            del self._seen[gone]
        ready = []
        for path, stamp in found.items():
            seen = self._seen.get(path)
            if seen is None or seen.stamp != stamp:
                self._seen[path] = _Seen(stamp, now)
                continue
            seen.same += 1
            if not seen.taken and self._settled(path, seen, now):
                seen.lacks = completeness(path) or ""
                if not seen.lacks:
                    seen.taken = True
                    ready.append(path)
        return ready

    def _settled(self, path: Path, seen: _Seen, now: float) -> bool:
        rest_s = max(self.rest_s, GZIP_REST_S if path.suffix.lower() == ".gz" else 0.0)
        return seen.same >= self.settle and now - seen.since_s >= rest_s

    def waiting(self) -> dict[Path, str]:
        """Files that are not taken yet, and why."""
        return {
            path: seen.lacks or "the file is still being written."
            for path, seen in sorted(self._seen.items())
            if not seen.taken
        }
