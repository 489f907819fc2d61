"""Kept, doubtful or dropped: the rules, and the sentences that say why.

A frame is as bad as the worst of its findings:

==================================================  ==========================  =================
finding                                             doubtful                    dropped
==================================================  ==========================  =================
sky dimmer than this band's clear level             0.3 mag                     1 mag
the same against the frame's own night              0.2 mag
dew: sinks steadily, stars widen or sky darkens     0.1 mag lost
cloud over part of the frame (its own plane)        0.1 mag across the frame    0.5 mag
star-to-star scatter (patchy cloud)                 0.02 mag beyond the noise   0.05 mag and 3 ×
stars all elongated in one direction (trailing)     1.5                         2.5
image width against the camera's median             2 ×                         4 ×
flat or hollow images (out of focus)                always
comparison stars                                    < 5                         < 3
Sun's altitude                                      > −9°
the same with a bright sky                          > −12° and 3 × as bright
sky brighter towards one side (Moon, stray light)   25 %
satellite or aeroplane                                                          across all targets
colour slope of the stars (wheel slip)                                          another filter's
no flat field                                       always
file unreadable, field not recognised                                           always
==================================================  ==========================  =================

A trailed frame is measured through the same aperture for all stars, so it stays usable while its stars agree; where
they do not, the scatter drops it. Beyond the frame as a whole, each target and comparison star has its own flags,
for the aperture that is used:

==================================================  ==========================  =================
in the aperture                                     target                      comparison star
==================================================  ==========================  =================
saturated pixel, edge of the frame, trail           dropped                     left out
cosmic ray, bad pixel or column, non-linear peak,   doubtful                    left out
residual image of a saturated star
neighbour's light                                   said                        kept
==================================================  ==========================  =================

The bounds are common practice. What a person decided stands above all findings.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reduce.records import Choices, FrameState, FrameVerdict, Measured, Quality

DIM_MAG, OVERCAST_MAG = 0.3, 1.0
NIGHT_DIM_MAG = 0.2
DEWED_MAG = 0.1
CLOUD_EDGE_MAG, CLOUD_BANK_MAG = 0.1, 0.5
PATCHY_MAG, PATCHY_RATIO = 0.05, 3.0
UNEVEN_MAG = 0.02
TRAILED, TORN = 1.5, 2.5
TRAIL_AGREEMENT = 0.7
WIDE_RATIO, BLURRED_RATIO = 2.0, 4.0
FLAT_TOPPED = 4.2
"""Surface brightness inside 0.6 FWHM over that from 0.6 to 1 FWHM. In focus 3.6 at most (a Gaussian, by its integral;
with pixels and wings 2.3 to 3.3). A disc or a ring ends more sharply, and the width of the Gaussian that stands for it
reaches beyond its edge: 4.5 to 11 (measured on simulated rings with radii of 1.3 to 4 times the seeing)."""
FEW_STARS, LEAST_STARS = 5, 3
TWILIGHT_SUN_DEG = -9.0
DUSK_SUN_DEG, DUSK_SKY = -12.0, 3.0
SKY_GRADIENT = 0.25
LEAST_FRAMES = 3
"""Fewer frames than this say nothing about what is usual."""

Finding = tuple[FrameState, str]
_ORDER: tuple[FrameState, ...] = ("kept", "doubtful", "dropped")
NAN = float("nan")


def image_findings(
    quality: Quality, usual_fwhm_px: float, usual_sky_e_s: float = NAN, core_ratio: float = NAN
) -> list[Finding]:
    """What the image itself says.

    Parameters
    ----------
    quality
        Of the frame.
    usual_fwhm_px, usual_sky_e_s
        Width, and sky in electrons a pixel and second, of the camera and band; NaN when unknown.
    core_ratio
        How much brighter stars are inside than around (see `FLAT_TOPPED`); NaN when unknown.
    """
    found: list[Finding] = []
    if quality.elongation > TRAILED and quality.trail_agreement > TRAIL_AGREEMENT:
        state: FrameState = "dropped" if quality.elongation > TORN else "doubtful"
        found.append((state, f"stars are trailed ({quality.elongation:.1f} times longer than wide)"))
    if quality.fwhm_px > WIDE_RATIO * usual_fwhm_px:
        state = "dropped" if quality.fwhm_px > BLURRED_RATIO * usual_fwhm_px else "doubtful"
        found.append((state, f"stars are {quality.fwhm_px / usual_fwhm_px:.1f} times wider than usual"))
    if core_ratio > FLAT_TOPPED:
        found.append(("doubtful", "out of focus: stars are discs or rings"))
    if not quality.flat_used:
        found.append(("doubtful", "no flat field was applied"))
    found += _light_of_the_sky(quality, usual_sky_e_s)
    return found


def _light_of_the_sky(quality: Quality, usual_sky_e_s: float) -> list[Finding]:
    found: list[Finding] = []
    sun, brighter = quality.sun_altitude_deg, quality.sky_e_px / quality.exposure_s / usual_sky_e_s
    if sun is not None and sun > TWILIGHT_SUN_DEG:
        found.append(("doubtful", f"taken in twilight (Sun at {sun:.0f}°)"))
    elif sun is not None and sun > DUSK_SUN_DEG and brighter > DUSK_SKY:
        found.append(("doubtful", f"taken in twilight (Sun at {sun:.0f}°, sky {brighter:.0f} × its usual brightness)"))
    if quality.sky_gradient is not None and quality.sky_gradient > SKY_GRADIENT:
        percent = 100 * quality.sky_gradient
        found.append(("doubtful", f"the sky is {percent:.0f} % brighter on one side (moonlight or stray light)"))
    return found


def star_findings(n_stars: int, band: str) -> list[Finding]:
    """Too few comparison stars."""
    if n_stars < LEAST_STARS:
        stars = "no comparison star" if n_stars == 0 else f"only {n_stars} comparison star{'s' * (n_stars > 1)}"
        return [("dropped", f"{stars} with a {band} magnitude could be used")]
    if n_stars < FEW_STARS:
        return [("doubtful", f"only {n_stars} comparison stars could be used")]
    return []


def cloud_findings(dimming_mag: float, night_dimming_mag: float, dewed_mag: float, across_mag: float) -> list[Finding]:
    """What the zero point says; NaN where there is nothing to compare with.

    Parameters
    ----------
    dimming_mag, night_dimming_mag
        Against the clear level of the season and of the night.
    dewed_mag
        Lost to dew; 0 for other causes.
    across_mag
        Change of the frame's own plane from one side to the other.
    """
    found: list[Finding] = []
    if dewed_mag > DEWED_MAG:
        found.append(("doubtful", f"dew: {dewed_mag:.1f} mag lost since the start of the night, steadily"))
    if dimming_mag > DIM_MAG:
        state: FrameState = "dropped" if dimming_mag > OVERCAST_MAG else "doubtful"
        found.append((state, f"cloud: the sky let through {dimming_mag:.1f} mag less than when clear"))
    elif night_dimming_mag > NIGHT_DIM_MAG and not dewed_mag > DEWED_MAG:
        found.append(("doubtful", f"cloud: {night_dimming_mag:.1f} mag less came through than at best that night"))
    if across_mag > CLOUD_EDGE_MAG:
        state = "dropped" if across_mag > CLOUD_BANK_MAG else "doubtful"
        found.append((state, f"cloud over part of the frame: {across_mag:.2f} mag from one side to the other"))
    return found


def scatter_findings(rms_mag: float, expected_rms_mag: float, scatter_mag: float, trailed: bool) -> list[Finding]:
    """Comparison stars that do not agree.

    Parameters
    ----------
    rms_mag, expected_rms_mag
        Star-to-star scatter, and what photons allow.
    scatter_mag
        Scatter beyond the photons; 0 where it is not significant.
    trailed
        The images say why.
    """
    what = "stars trailed one by one" if trailed else "patchy cloud"
    if rms_mag > PATCHY_MAG and rms_mag > PATCHY_RATIO * expected_rms_mag:
        return [("dropped", f"{what}: comparison stars scatter by {rms_mag:.2f} mag")]
    if max(scatter_mag, rms_mag if rms_mag > PATCHY_RATIO * expected_rms_mag else 0.0) > UNEVEN_MAG:
        return [("doubtful", f"{what}: comparison stars scatter by {rms_mag:.2f} mag, more than their noise")]
    return []


def crossed_findings(crossed: Sequence[str], n_targets: int) -> list[Finding]:
    """A trail over every target leaves nothing; over some, the others are as good as ever."""
    if crossed and len(crossed) == n_targets:
        return [("dropped", f"a satellite or an aeroplane crossed {' and '.join(crossed)}")]
    return []


def usual_fwhm_px(qualities: Sequence[Quality]) -> float:
    """Median image width of a set of frames; NaN with fewer than 3."""
    return _usual([q.fwhm_px for q in qualities])


def usual_sky_e_s(qualities: Sequence[Quality]) -> float:
    """Median sky of a set of frames, electrons a pixel and second; NaN with fewer than 3."""
    return _usual([q.sky_e_px / q.exposure_s for q in qualities])


def _usual(values: Sequence[float]) -> float:
    known = [value for value in values if np.isfinite(value)]
    return float(np.median(known)) if len(known) >= LEAST_FRAMES else NAN


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
