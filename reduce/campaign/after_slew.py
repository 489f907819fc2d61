"""What the newest frame says after a slew: pointing, peak against linearity, and how far the night's bands have got."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from reduce.records import BANDS
from reduce.views import AfterSlew, BandProgress, FrameRow

SNR_GOAL = 50.0
"""A magnitude good to 0.02 (common practice)."""
NEAR_LIMIT = 0.9
"""Peak over the linear limit from which seeing that improves would spoil the next frame (common practice)."""
MOST_FRAMES = 99


def after_slew(rows: Sequence[FrameRow], goals: Mapping[str, float]) -> AfterSlew | None:
    """The newest light frame in words that help at the telescope; None before the first.

    Parameters
    ----------
    rows
        Frames of the targets (no standards, no calibration), by time.
    goals
        Band → signal-to-noise wanted of a night; absent: `SNR_GOAL`.
    """
    lights = [row for row in rows if row.mjd is not None and row.outcome in ("measured", "no match")]
    if not lights:
        return None
    newest = lights[-1]
    target = newest.targets[0] if newest.targets else ""
    bands = progress_of(lights, target, newest.night, goals) if target else ()
    peak, limit = newest.peak_adu, newest.limit_adu
    too_bright = peak is not None and limit is not None and peak > NEAR_LIMIT * limit
    return AfterSlew(
        frame=newest.id,
        file=newest.file,
        target=target,
        band=newest.band,
        outcome=newest.outcome,
        reason=newest.reason,
        offset_arcmin=newest.offset_arcmin,
        rotation_deg=newest.rotation_deg,
        peak_adu=peak,
        limit_adu=limit,
        too_bright=too_bright,
        bands=bands,
        advice=_advice(newest, target, bands, too_bright),
    )


def progress_of(
    rows: Sequence[FrameRow], target: str, night: str, goals: Mapping[str, float]
) -> tuple[BandProgress, ...]:
    """Signal-to-noise that a night's kept frames of a target reach together, in every band it was ever observed in.

    Frames that are averaged with inverse variances reach √Σ (S/N)².
    """
    mine = [row for row in rows if target in row.targets and row.band is not None]
    found = []
    for band in BANDS:
        if not any(row.band == band for row in mine):
            continue
        kept = [row for row in mine if (row.night, row.band, row.state) == (night, band, "kept")]
        snr = math.sqrt(sum(max(row.snr.get(target, 0.0), 0.0) ** 2 for row in kept))
        found.append(BandProgress(band, len(kept), snr, goals.get(band, SNR_GOAL)))
    return tuple(found)


def frames_missing(newest: FrameRow, target: str, band: BandProgress) -> int | None:
    """Frames like the newest that the goal still needs; None when it says nothing of them."""
    one = newest.snr.get(target, 0.0)
    if newest.state != "kept" or one <= 0.0:
        return None
    n = math.ceil((band.goal**2 - band.snr**2) / one**2)
    return n if n <= MOST_FRAMES else None


def _advice(newest: FrameRow, target: str, bands: Sequence[BandProgress], too_bright: bool) -> str:
    if newest.outcome == "no match":
        return "the field was not recognised: look at the picture before going on"
    if not target:
        return "no target of this campaign is on the frame: correct the pointing"
    if too_bright:
        return "expose shorter: the target is at the limit of the linear range"
    here = next((band for band in bands if band.band == newest.band), None)
    if here is None:
        return "the filter has no known band"
    lacking = [band.band for band in bands if not band.enough]
    if here.enough:
        if lacking:
            return f"enough in {here.band}, change filter: {' '.join(lacking)} to go"
        return "enough in all bands: go on to the next target"
    missing = frames_missing(newest, target, here)
    if missing is None:
        return f"go on in {here.band}"
    return f"go on in {here.band}: about {missing} more like this" if missing > 1 else f"one more in {here.band}"
