"""How clear the air was, from zero points: against the season, against the night, and sinking as dew makes it.

A zero point is first freed of a typical k′X; what is unsure of k′ is allowed for.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats
from reduce.standard.extinction import TYPICAL_FIRST_ORDER

CLEAR_PERCENTILE = 80.0
WINDOW_D = 15.0
"""Mirrors age and are washed: clear is what is clear within this many days."""
LEAST_FRAMES = 3
"""Fewer frames than this say nothing about what is usual."""
FIRST_ORDER_ERR = 0.12
"""mag per airmass; sites and nights differ by as much from the typical k′ (common practice)."""
LEAST_FRAMES_FOR_DEW = 5
DEW_MAG, DEW_WIDER, DEW_DARKER, DEW_REGAINED = 0.15, 1.15, 0.9, 0.3
"""mag lost in a night; growth of widths; fall of the sky; part of the loss that may come back in between (common
practice)."""


def clear_level(zp_mag: Floats, airmass: Floats, band: str) -> Floats:
    """(F,) zero points freed of a typical k′X; without an airmass as at the zenith."""
    return zp_mag + TYPICAL_FIRST_ORDER.get(band, 0.2) * np.where(np.isfinite(airmass), airmass, 1.0)


def dimming(zp_mag: Floats, airmass: Floats, band: str, mjd: Floats, speaks: NDArray[np.bool_] | None = None) -> Floats:
    """(F,) mag by which each frame is dimmer than this camera and band's clear level at its airmass.

    The clear level is the 80th percentile within 15 days, or of all frames where these are fewer than 3; NaN below
    3 frames in all. Only frames that ``speaks`` names are asked what is clear; None: all.
    """
    level, finite = clear_level(zp_mag, airmass, band), np.isfinite(zp_mag)
    if speaks is not None:
        finite &= speaks
    dim = np.full(len(level), np.nan)
    if finite.sum() < LEAST_FRAMES:
        return dim
    season = float(np.percentile(level[finite], CLEAR_PERCENTILE))
    for day in np.unique(np.floor(mjd)):
        near = finite & (np.abs(mjd - day - 0.5) <= WINDOW_D)
        clear = float(np.percentile(level[near], CLEAR_PERCENTILE)) if near.sum() >= LEAST_FRAMES else season
        today = np.floor(mjd) == day
        dim[today] = clear - level[today]
    # Without an airmass, one more of it than the clear frames had is no cloud.
    return dim - TYPICAL_FIRST_ORDER.get(band, 0.2) * ~np.isfinite(airmass)


def nightly_dimming(
    zp_mag: Floats, airmass: Floats, band: str, night: NDArray[np.int64], speaks: NDArray[np.bool_] | None = None
) -> Floats:
    """(F,) mag by which each frame is dimmer than its own night's clear level; NaN in nights of fewer than 3."""
    level, finite = clear_level(zp_mag, airmass, band), np.isfinite(zp_mag) & np.isfinite(airmass)
    if speaks is not None:
        finite &= speaks
    dim = np.full(len(level), np.nan)
    for one in np.unique(night):
        mine = (night == one) & finite
        if mine.sum() < LEAST_FRAMES:
            continue
        clear = float(np.percentile(level[mine], CLEAR_PERCENTILE))
        best = float(np.median(airmass[mine][level[mine] >= clear]))
        dim[mine] = clear - level[mine] - FIRST_ORDER_ERR * np.abs(airmass[mine] - best)
    return dim


def dew(dim_mag: Floats, mjd: Floats, fwhm_px: Floats, airmass: Floats, sky_e_s: Floats) -> Floats:
    """(F,) mag lost to dew on each frame of one night; 0 where it was something else or nothing.

    Dew takes light steadily, spreads stars and dims the sky with them; cloud comes and goes and lights the sky up.

    Parameters
    ----------
    dim_mag
        `nightly_dimming` of the frames.
    mjd, fwhm_px, airmass, sky_e_s
        (F,) times, widths, airmasses (NaN: unknown), and the sky in electrons a pixel and second.
    """
    lost = np.zeros(len(dim_mag))
    known = np.flatnonzero(np.isfinite(dim_mag))
    if len(known) < LEAST_FRAMES_FOR_DEW:
        return lost
    order = known[np.argsort(mjd[known], kind="stable")]
    dim, quarter = dim_mag[order], max(1, len(order) // 4)
    sinks = float(np.median(dim[-quarter:]) - np.median(dim[:quarter]))
    regained = float(np.max(np.maximum.accumulate(dim) - dim))
    width = fwhm_px[order] * np.where(np.isfinite(airmass[order]), airmass[order], 1.0) ** -0.6
    wider = float(np.median(width[-quarter:]) / np.median(width[:quarter]))
    start = float(np.median(sky_e_s[order][:quarter]))
    darker = float(np.median(sky_e_s[order][-quarter:])) / start if start > 0 else 1.0
    if sinks > DEW_MAG and regained < DEW_REGAINED * sinks and (wider > DEW_WIDER or darker < DEW_DARKER):
        lost[order] = np.maximum(dim - np.median(dim[:quarter]), 0.0)
    return lost
