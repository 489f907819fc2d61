"""What flats and biases say of a detector, beside what its header and the settings say.

Gain by photon transfer (Janesick), read noise from the scatter of the biases, linearity from flats of a steady lamp,
and the level at which pixels are full.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from reduce.frames.detector import (
    DIGITISATION_ADU,
    gain_from_pairs,
    pair_statistics,
    read_noise_from_pair,
    stated_value,
)
from reduce.records import FrameInfo, Image
from reduce.settings import Settings

TILE_PX = 64
"""Side of the tiles whose statistics are taken: over one the light of two flats differs by a factor only."""
GAIN_DIFFERS, NOISE_DIFFERS, LEVEL_DIFFERS = 0.10, 0.20, 0.03
"""Relative; from here on a disagreement is said (common practice)."""
SIGNIFICANT = 4.0
STRAIGHT = 0.01
"""Departure from proportion that ends the linear range."""
STEADY = 0.003
"""Scatter about a line that a lamp may have."""
LEAST_LENGTHS, LEAST_LEVER = 4, 3.0


@dataclass(frozen=True, slots=True)
class DetectorMeasure:
    """Measured on flats of one filter; None where they cannot tell."""

    gain_e_per_adu: float | None = None
    gain_err: float | None = None
    n_pairs: int = 0
    read_noise_e: float | None = None
    straight_to_adu: float | None = None
    """Highest raw level, of those that were exposed, up to which counts are proportional to time."""
    bent_from_adu: float | None = None
    """Lowest level that departs from proportion by more than 1 %."""
    full_adu: float | None = None
    """Level at which pixels were full."""


def pair_gain(first: Image, second: Image, bias_variance_adu2: float) -> tuple[float, float]:
    """Gain, e-/ADU, and its statistical error, from two flats that differ in level.

    Parameters
    ----------
    first, second
        (ny, nx) flats without bias, ADU, of levels within some 20 %.
    bias_variance_adu2
        Variance of one pixel of a single bias.

    Notes
    -----
    With r the ratio of the levels, ``var(F1 - r F2) = (L1 + r² L2) / g + (1 + r²) var(B)``, in each tile, with a
    plane taken off: the light of twilight changes from flat to flat. For r = 1 it is `detector.gain_from_pairs`.

    Raises
    ------
    ValueError
        The flats are not noisier than the biases.
    """
    light, flat_variance, bias_variance, n = [0.0, 0.0], 0.0, 0.0, 0
    rows, columns = np.indices((TILE_PX, TILE_PX)) / TILE_PX
    plane = np.column_stack([np.ones(TILE_PX**2), rows.ravel(), columns.ravel()])
    ny, nx = first.shape
    for y in range(0, ny - TILE_PX + 1, TILE_PX):
        for x in range(0, nx - TILE_PX + 1, TILE_PX):
            at = np.s_[y : y + TILE_PX, x : x + TILE_PX]
            a, b = first[at].astype(np.float64), second[at].astype(np.float64)
            good = np.isfinite(a) & np.isfinite(b)
            if good.sum() < TILE_PX**2 // 2:
                continue
            a, b = a[good], b[good]
            ratio = float(np.median(a) / np.median(b))
            tilt = plane[good.ravel()]
            tilted = tilt @ np.linalg.lstsq(tilt, a - ratio * b, rcond=None)[0]
            (level, other), sd = pair_statistics(a, ratio * b + tilted)
            light[0] += level
            light[1] += ratio * other
            flat_variance += sd**2
            bias_variance += (1.0 + ratio**2) * bias_variance_adu2
            n += int(good.sum())
    gain = gain_from_pairs((light[0], light[1]), (0.0, 0.0), math.sqrt(flat_variance), math.sqrt(bias_variance))
    return gain, gain * math.sqrt(2.0 / n)


def mean_gain(pairs: Sequence[tuple[float, float]]) -> tuple[float, float]:
    """Mean of the pairs' gains and its error: the larger of what their scatter and their own errors say."""
    gains = np.array([gain for gain, _ in pairs])
    own = float(np.sqrt(np.sum(np.square([err for _, err in pairs])))) / len(pairs)
    scatter = float(np.std(gains, ddof=1)) / math.sqrt(len(pairs)) if len(pairs) > 1 else 0.0
    return float(np.mean(gains)), max(own, scatter)


def read_noise_of(single_noise_adu: float, gain_e_per_adu: float, step_adu: float = 1.0) -> float:
    """Read noise, e-, from the scatter of single biases about their mean; rounding is taken off."""
    variance_adu2 = max(single_noise_adu**2 - (step_adu * DIGITISATION_ADU) ** 2, 0.0)
    return read_noise_from_pair(math.sqrt(2.0 * variance_adu2), gain_e_per_adu)


def straightness(
    exposures_s: Sequence[float], levels_adu: Sequence[float], raw_adu: Sequence[float]
) -> tuple[float | None, float | None]:
    """Raw level up to which a detector is straight, and the lowest at which it is not; None, None when none can tell.

    A line through the fainter half of the flats gives rate and the shutter's delay; if these scatter about it by more
    than 0.3 %, or are too few, the lamp was not steady and nothing follows.

    Parameters
    ----------
    levels_adu
        Median of each flat without bias.
    raw_adu
        The same with it.
    """
    t, level, raw = (np.asarray(values, float) for values in (exposures_s, levels_adu, raw_adu))
    order = np.argsort(level, kind="stable")
    t, level, raw = t[order], level[order], raw[order]
    lengths = np.unique(np.round(t, 3))
    if len(lengths) < LEAST_LENGTHS or lengths[-1] < LEAST_LEVER * lengths[0]:
        return None, None
    faint = level <= max(0.5 * level[-1], level[min(2, len(level) - 1)])
    if len(np.unique(np.round(t[faint], 3))) < 2 or faint.sum() < 3:
        return None, None
    weight = 1.0 / level[faint]  # relative residuals count
    rate, offset = np.linalg.lstsq(
        np.column_stack([t[faint], np.ones(faint.sum())]) * weight[:, None], np.ones(faint.sum()), rcond=None
    )[0]
    departure = level / (rate * t + offset) - 1.0
    if rate <= 0 or float(np.std(departure[faint])) > STEADY:
        return None, None
    bent = np.flatnonzero((np.abs(departure) > STRAIGHT) & ~faint)
    # One flat that is off is the lamp's; where all that are brighter are off as well, it is the detector.
    first = next((int(k) for k in bent if (np.abs(departure[k:]) > STRAIGHT).all()), None)
    straight = raw[-1] if first is None else raw[max(first - 1, 0)]
    return float(straight), None if first is None else float(raw[first])


@dataclass(frozen=True, slots=True)
class Stated:
    """What a header and the settings say of a detector."""

    gain_e_per_adu: float | None
    read_noise_e: float | None
    saturation_adu: float | None
    linear_limit_adu: float | None


def stated_of(info: FrameInfo, settings: Settings) -> Stated:
    """Of one frame."""
    camera = settings.camera
    return Stated(
        stated_value(info.gain_e_per_adu, camera.gain_e_per_adu, settings),
        stated_value(info.read_noise_e, camera.read_noise_e, settings),
        stated_value(info.saturation_adu, camera.saturation_adu, settings),
        camera.linear_limit_adu,
    )


def disagreements(name: str, measured: DetectorMeasure, stated: Stated) -> list[str]:
    """Sentences on what is stated otherwise than measured, or not stated at all.

    Parameters
    ----------
    name
        Of the flats, as a person calls them.
    """
    gain_e_per_adu, read_noise_e = stated.gain_e_per_adu, stated.read_noise_e
    saturation_adu, linear_limit_adu = stated.saturation_adu, stated.linear_limit_adu
    said: list[str] = []
    gain, gain_err = measured.gain_e_per_adu, measured.gain_err or 0.0
    if gain is not None and gain_e_per_adu is None:
        said.append(f"{name}: gain {gain:.2f} ± {gain_err:.2f} e-/ADU measured, and not stated; it is used.")
    elif gain is not None and gain_e_per_adu is not None and _differ(gain, gain_e_per_adu, GAIN_DIFFERS, gain_err):
        said.append(
            f"{name}: gain {gain:.2f} ± {gain_err:.2f} e-/ADU measured, {gain_e_per_adu:g} stated; all errors suffer "
            f"(write gain_e_per_adu = {gain:.2f} and overrides_header = true under [camera])."
        )
    noise = measured.read_noise_e
    if noise is not None and read_noise_e is None:
        said.append(f"{name}: read noise {noise:.1f} e- measured, and not stated; it is used.")
    elif noise is not None and read_noise_e is not None and _differ(noise, read_noise_e, NOISE_DIFFERS, 0.0):
        said.append(
            f"{name}: read noise {noise:.1f} e- measured, {read_noise_e:g} stated "
            f"(write read_noise_e = {noise:.1f} and overrides_header = true under [camera])."
        )
    full, bent = measured.full_adu, measured.bent_from_adu
    if full is not None and (saturation_adu is None or full < (1.0 - LEVEL_DIFFERS) * saturation_adu):
        said_of_it = "not stated" if saturation_adu is None else f"{saturation_adu:.0f} stated"
        said.append(
            f"{name}: pixels were full at {full:.0f} ADU, {said_of_it} (write saturation_adu = {full:.0f} and "
            "overrides_header = true under [camera])."
        )
    limit = linear_limit_adu if linear_limit_adu is not None else saturation_adu
    if bent is not None and (limit is None or bent < (1.0 - LEVEL_DIFFERS) * limit):
        below = measured.straight_to_adu or bent
        said.append(
            f"{name}: counts leave a straight line by more than 1 % at {bent:.0f} ADU "
            f"(write linear_limit_adu = {below:.0f} under [camera])."
        )
    return said


def _differ(measured: float, stated: float, relative: float, error: float) -> bool:
    return abs(measured - stated) > max(relative * stated, SIGNIFICANT * error)
