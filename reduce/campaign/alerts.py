"""What happened this night that an observer wants to be told of at once."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from statistics import median

from reduce.campaign.after_slew import NEAR_LIMIT
from reduce.views import Alert, FrameRow

FOCUS_RATIO = 1.3
"""Width of the last frames over the best the night had (common practice)."""
FOCUS_FRAMES = 3
"""Medians of so many: one gust is no drift."""


def alerts_of(rows: Sequence[FrameRow], lowest_altitude_deg: float) -> tuple[Alert, ...]:
    """Alerts of the newest night, oldest first; an alert keeps its id while its frame stands.

    Parameters
    ----------
    rows
        Frames of the targets by time.
    """
    lights = [row for row in rows if row.outcome in ("measured", "no match") and row.mjd is not None]
    if not lights:
        return ()
    night = [row for row in lights if row.night == lights[-1].night]
    return tuple(alert for k, row in enumerate(night) for alert in _of_frame(night[: k + 1], row, lowest_altitude_deg))


def _of_frame(night: Sequence[FrameRow], row: FrameRow, lowest_altitude_deg: float) -> Iterator[Alert]:
    if row.by_person:
        return
    cloudy = "cloud" in row.reason
    if cloudy:
        yield Alert(f"cloud {row.id}", "cloud", f"{row.file}: {row.reason}")
    elif row.state == "dropped":
        yield Alert(f"dropped {row.id}", "dropped", f"{row.file} was dropped: {row.reason}")
    if row.peak_adu is not None and row.limit_adu is not None and row.peak_adu > NEAR_LIMIT * row.limit_adu:
        said = f"{row.file}: the target's peak is at {100.0 * row.peak_adu / row.limit_adu:.0f} % of linear"
        yield Alert(f"saturated {row.id}", "saturated", said)
    wider = _drift(night)
    if wider > FOCUS_RATIO and _drift(night[:-1]) <= FOCUS_RATIO:
        yield Alert(f"focus {row.id}", "focus", f"Stars are {wider:.1f} times wider than earlier this night: focus?")
    if _sinks_through(night, lowest_altitude_deg):
        name = row.targets[0] if row.targets else "The field"
        said = f"{name} has sunk below {lowest_altitude_deg:.0f}°: airmass {row.airmass:.2f}"
        yield Alert(f"low {row.id}", "low", said)


def _drift(night: Sequence[FrameRow]) -> float:
    """Width of the last frames over the narrowest three in a row before them; 1 where there are too few."""
    widths = [row.fwhm_arcsec for row in night if row.fwhm_arcsec is not None]
    if len(widths) < 2 * FOCUS_FRAMES:
        return 1.0
    medians = [median(widths[k : k + FOCUS_FRAMES]) for k in range(len(widths) - FOCUS_FRAMES + 1)]
    return medians[-1] / min(medians[:-FOCUS_FRAMES])


def _sinks_through(night: Sequence[FrameRow], lowest_altitude_deg: float) -> bool:
    """Whether the newest frame is the first of its target below the limit, and lower than the one before."""
    limit = 1.0 / math.sin(math.radians(lowest_altitude_deg))  # plane-parallel: right to 0.01 at 30°
    here = [row.airmass for row in night if row.targets == night[-1].targets and row.airmass is not None]
    return len(here) > 1 and night[-1].airmass is not None and here[-2] <= limit < here[-1]
