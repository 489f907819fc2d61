"""Which files of a folder are frames, and whether they are whole: by looking, so that it works on local disks and
network file systems alike. When a whole file may be taken is the campaign's to say (`reduce.campaign.intake`).
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

from reduce.almanac.times import SECONDS_PER_DAY
from reduce.frames.extent import BLOCK, CutShort, declared_units
from reduce.frames.reader import iso_time
from reduce.records import FrameError, FrameInfo

SUFFIXES = (".fits", ".fit", ".fts")
PACKINGS = ("", ".fz", ".gz")
UNIX_EPOCH_MJD = 40587.0
MOST_AHEAD_D = 1.0
"""Local time mistaken for UTC stays below a day."""

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


def refuse_future(info: FrameInfo, now_s: float) -> None:
    """Refuse a frame of the sky that is dated more than a day after now.

    Parameters
    ----------
    now_s
        Of this computer's clock, seconds since 1970 (UTC).

    Raises
    ------
    FrameError
        One of the two clocks is wrong, and with it every time in the light curve.
    """
    now_mjd = UNIX_EPOCH_MJD + now_s / SECONDS_PER_DAY
    if info.kind == "light" and info.mjd_mid is not None and info.mjd_mid > now_mjd + MOST_AHEAD_D:
        raise FrameError(
            f"the frame is dated {iso_time(info.mjd_mid)[:16]}, but this computer's clock says "
            f"{iso_time(now_mjd)[:16]} UTC; set the clock that is wrong, mend the header if it was the camera's, and "
            "start again."
        )


def completeness(path: Path) -> str | None:
    """What a file lacks that may still be written, in one sentence; None for a whole file and for no FITS file."""
    try:
        declared_units(path)
    except CutShort as error:
        return str(error)
    except FrameError:
        return None
    return None


def ends_in_zeros(path: Path) -> bool:
    """Whether a file's last block of 2,880 bytes is empty, as that of a file with a reserved size."""
    try:
        with path.open("rb") as file:
            file.seek(max(0, path.stat().st_size - BLOCK))
            return not any(file.read(BLOCK))
    except OSError:
        return False
