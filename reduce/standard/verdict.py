"""Kept, doubtful or dropped: the rules, and the sentences that say why.

A frame is as bad as the worst of its findings:

==================================================  ========  ========
finding                                             doubtful  dropped
==================================================  ========  ========
sky dimmer than this band's clear level             0.3 mag   1 mag
star-to-star scatter (patchy cloud)                           > 0.05 mag and > 3 × expected
stars all elongated in one direction (trailing)     1.5       2.5
image width against the camera's median             2 ×
comparison stars                                    < 5       < 3
Sun's altitude                                      > −9°
no flat field                                       always
file unreadable, field not recognised                         always
==================================================  ========  ========

The bounds are common practice. What a person decided stands above all findings.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reduce.records import Choices, Floats, FrameState, FrameVerdict, Measured, Quality
from reduce.standard.extinction import TYPICAL_FIRST_ORDER

DIM_MAG, OVERCAST_MAG = 0.3, 1.0
PATCHY_MAG, PATCHY_RATIO = 0.05, 3.0
TRAILED, TORN = 1.5, 2.5
TRAIL_AGREEMENT = 0.7
WIDE_RATIO = 2.0
FEW_STARS, LEAST_STARS = 5, 3
TWILIGHT_SUN_DEG = -9.0
CLEAR_PERCENTILE = 80.0
LEAST_FRAMES = 3
"""Fewer frames than this say nothing about what is usual."""

Finding = tuple[FrameState, str]
_ORDER: tuple[FrameState, ...] = ("kept", "doubtful", "dropped")


def image_findings(quality: Quality, usual_fwhm_px: float) -> list[Finding]:
    """What the image itself says; ``usual_fwhm_px`` NaN when unknown."""
    found: list[Finding] = []
    if quality.elongation > TRAILED and quality.trail_agreement > TRAIL_AGREEMENT:
        state: FrameState = "dropped" if quality.elongation > TORN else "doubtful"
        found.append((state, f"stars are trailed ({quality.elongation:.1f} times longer than wide)"))
    if quality.fwhm_px > WIDE_RATIO * usual_fwhm_px:
        found.append(("doubtful", f"stars are {quality.fwhm_px / usual_fwhm_px:.1f} times wider than usual"))
    if not quality.flat_used:
        found.append(("doubtful", "no flat field was applied"))
    if quality.sun_altitude_deg is not None and quality.sun_altitude_deg > TWILIGHT_SUN_DEG:
        found.append(("doubtful", f"taken in twilight (Sun at {quality.sun_altitude_deg:.0f}°)"))
    return found


def sky_findings(dimming_mag: float, rms_mag: float, expected_rms_mag: float, n_stars: int, band: str) -> list[Finding]:
    """What the zero point says; NaN where there is nothing to compare with."""
    found: list[Finding] = []
    if n_stars < LEAST_STARS:
        stars = "no comparison star" if n_stars == 0 else f"only {n_stars} comparison star{'s' * (n_stars > 1)}"
        found.append(("dropped", f"{stars} with a {band} magnitude could be used"))
    elif n_stars < FEW_STARS:
        found.append(("doubtful", f"only {n_stars} comparison stars could be used"))
    if dimming_mag > DIM_MAG:
        state: FrameState = "dropped" if dimming_mag > OVERCAST_MAG else "doubtful"
        found.append((state, f"cloud: the sky let through {dimming_mag:.1f} mag less than when clear"))
    if rms_mag > PATCHY_MAG and rms_mag > PATCHY_RATIO * expected_rms_mag:
        found.append(("dropped", f"patchy cloud: comparison stars scatter by {rms_mag:.2f} mag"))
    return found


def dimming(zp_mag: Floats, airmass: Floats, band: str) -> Floats:
    """(F,) mag by which each frame is dimmer than this camera and band's clear level at its airmass.

    The clear level is the 80th percentile of zero points freed from a typical k′X; NaN below 3 frames.
    """
    k = TYPICAL_FIRST_ORDER.get(band, 0.2)
    unknown = ~np.isfinite(airmass)
    level = zp_mag + k * np.where(unknown, 1.0, airmass)
    finite = np.isfinite(level)
    if finite.sum() < LEAST_FRAMES:
        return np.full(len(level), np.nan)
    # Without an airmass, one more of it than the clear frames had is no cloud.
    clear: Floats = np.percentile(level[finite], CLEAR_PERCENTILE) - level - k * unknown
    return clear


def usual_fwhm_px(qualities: Sequence[Quality]) -> float:
    """Median image width of a set of frames; NaN with fewer than 3."""
    widths = [q.fwhm_px for q in qualities if np.isfinite(q.fwhm_px)]
    return float(np.median(widths)) if len(widths) >= LEAST_FRAMES else float("nan")


def verdict(frame: str, findings: Sequence[Finding], choices: Choices) -> FrameVerdict:
    """The worst finding decides, unless a person did."""
    reasons = tuple(reason for _, reason in findings)
    forced = choices.frame_states.get(frame)
    if forced is not None:
        return FrameVerdict(frame, forced, reasons, by_person=True)
    state: FrameState = max((state for state, _ in findings), key=_ORDER.index, default="kept")
    return FrameVerdict(frame, state, reasons)


def verdict_without_measurement(measured: Measured, choices: Choices) -> FrameVerdict:
    """Of a frame that could not be read or recognised: nothing can keep it."""
    forced = measured.frame in choices.frame_states
    return FrameVerdict(measured.frame, "dropped", (measured.reason or measured.outcome,), by_person=forced)
