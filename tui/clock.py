"""The present moment, read in one place."""

from __future__ import annotations

import time

UNIX_EPOCH_MJD = 40587.0


def now_mjd() -> float:
    """MJD in UTC."""
    return UNIX_EPOCH_MJD + time.time() / 86400.0
