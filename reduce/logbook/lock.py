"""One reducer per logbook: a lock of the kernel, freed when its holder ends, however it ends."""

from __future__ import annotations

import fcntl
import os
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path

from reduce.logbook.database import LogbookError
from reduce.logbook.ids import iso, utc_now
from reduce.plain_text import PlainError, clean_text

LOCK_FILE = "reducer.lock"


class ReducerBusy(PlainError):
    """Another process reduces this campaign."""


@contextmanager
def reducer_lock(folder: Path, clock: Callable[[], datetime] = utc_now) -> Iterator[None]:
    """Hold the right to reduce the campaign in ``folder``.

    Raises
    ------
    ReducerBusy
        One sentence with process, machine and time of the holder.
    LogbookError
        The lock file cannot be made.
    """
    path = folder / LOCK_FILE
    try:
        handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o664)
    except OSError as error:
        raise LogbookError(
            f"{clean_text(path, 300)} cannot be opened: {clean_text(error.strerror or error)}."
        ) from error
    try:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            holder = clean_text(os.pread(handle, 200, 0).decode("utf-8", "replace"))
            raise ReducerBusy(
                f"Another process reduces this campaign ({holder or 'unknown holder'}); "
                "end it, or follow its results here."
            ) from error
        except OSError as error:
            raise LogbookError(
                f"{clean_text(path, 300)} cannot be locked: {clean_text(error.strerror or error)}; "
                "move the campaign to a local disk."
            ) from error
        words = f"process {os.getpid()} on {clean_text(socket.gethostname(), 60)} since {iso(clock())}\n"
        os.ftruncate(handle, 0)
        os.pwrite(handle, words.encode(), 0)
        yield
    finally:
        os.close(handle)


def is_reducing(folder: Path) -> bool:
    """Whether some process holds the reducer's lock now; looking does not take it."""
    try:
        handle = os.open(folder / LOCK_FILE, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return False
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except OSError:
        return True
    else:
        return False
    finally:
        os.close(handle)
