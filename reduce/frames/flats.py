"""Which flats are good enough, how each is made ready for the master, and what they say of the detector."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.frames.combine import MAD_TO_SIGMA
from reduce.frames.detector import (
    CONVERTER_TOPS_ADU,
    FAR_ABOVE_SKY_ADU,
    LARGEST_16_BIT,
    LARGEST_FULL_SHARE,
    saturation_level,
)
from reduce.frames.detector_check import DetectorMeasure, mean_gain, pair_gain, read_noise_of, straightness
from reduce.frames.master_pixels import master_for, pedestal_adu
from reduce.frames.master_sets import ChosenMasters, MasterPlan
from reduce.frames.reader import Frame
from reduce.records import FrameError, Image
from reduce.settings import Settings

GOOD_RANGE, USABLE_RANGE = (0.20, 0.60), (0.10, 0.80)
"""Levels of flats as fractions of the linear range; good ones are taken where there are three (common practice)."""
ENOUGH_GOOD = 3
SHORTEST_S = 1.0
"""Shorter flats show the shutter; they are left out where there are others (common practice)."""
LEVEL_SAMPLE = 250_000
"""Pixels that the level of a flat is taken from."""
STAR_SIGMA, STAR_REACH_PX = 5.0, 4
MOST_STARRY = 0.05
"""Of the pixels; a flat with more of them under stars is refused."""
MOST_PAIRS, PAIR_SIDE_PX, PAIR_LEVELS = 6, 512, 0.25

Prepare = Callable[[Image, int, int], Image]
"""(rows as read, without overscan; first, end) → rows to combine."""


@dataclass(frozen=True, slots=True)
class _Flat:
    frame: Frame
    fraction: float
    """Level over the linear range; 1 where the pixels are full."""
    lowest: float
    """Fraction from which on it is usable."""
    level_adu: float
    """Without the pedestal."""
    raw_adu: float
    full_adu: float | None


def choose_flats(
    plan: MasterPlan, frames: Sequence[Frame], lower: ChosenMasters, settings: Settings, notes: list[str]
) -> tuple[list[Frame], list[Prepare], DetectorMeasure]:
    """Flats of a good level without stars, how to free each of pedestal and level, and what all say of the detector.

    Those of a shutter map may be short, and of any usable level.

    Raises
    ------
    FrameError
        No flat is of a usable level.
    """
    label, of_shutter = plan.label, plan.kind == "shutter"
    flats = [_looked_at(frame, lower, settings) for frame in frames]
    kept = [flat for flat in flats if _within(flat, GOOD_RANGE)]
    if len(kept) < ENOUGH_GOOD or of_shutter:
        kept = [flat for flat in flats if _within(flat, USABLE_RANGE)]
        if any(not _within(flat, GOOD_RANGE) for flat in kept):
            notes.append("flats outside 20 to 60 % of the linear range were taken, as there are too few inside.")
    if not kept:
        fractions = [100.0 * flat.fraction for flat in flats]
        raise FrameError(
            f"{label}: all {len(frames)} flats are at {min(fractions):.0f}–{max(fractions):.0f} % of the linear range, "
            "outside 10–80 %; take them again with another exposure, or state the saturation_adu of the camera under "
            "[camera] in observatory.toml."
        )
    if len(kept) < len(flats):
        notes.append(f"{len(flats) - len(kept)} of {len(flats)} flats were left out for their level.")
    if not of_shutter and lower.shutter is None:
        kept = _long_enough(kept, notes)
    kept.sort(key=lambda flat: (flat.frame.info.mjd_mid or 0.0, str(flat.frame.path)))
    stars = _starry(kept, lower)
    crowded = [k for k, under in enumerate(stars) if under is not None and under.mean() > MOST_STARRY]
    if len(kept) - len(crowded) >= 2 or len(crowded) == len(kept):
        if crowded:
            notes.append(f"{len(crowded)} of {len(kept)} flats show too many stars and were left out.")
        if len(crowded) == len(kept):
            raise FrameError(
                f"{label}: all {len(kept)} flats show stars; take them in brighter twilight or on a screen."
            )
        stars = [under for k, under in enumerate(stars) if k not in crowded]
        kept = [flat for k, flat in enumerate(kept) if k not in crowded]
    prepare = [
        _divide(flat, lower, under if under is not None and under.any() else None)
        for flat, under in zip(kept, stars, strict=True)
    ]
    return [flat.frame for flat in kept], prepare, _detector(flats, kept, lower, settings)


def _within(flat: _Flat, levels: tuple[float, float]) -> bool:
    return min(levels[0], flat.lowest) <= flat.fraction <= levels[1] and flat.level_adu > 0


def _looked_at(frame: Frame, lower: ChosenMasters, settings: Settings) -> _Flat:
    """Level of a flat.

    Where nobody states the saturation, the converter may be one of few bits: what would be enough for the smallest is.
    """
    image = frame.read()
    step = max(1, math.isqrt(image.size // LEVEL_SAMPLE))
    sample = image[::step, ::step]
    raw = float(np.nanmedian(sample))
    level = float(np.nanmedian(without_pedestal(frame, image, lower, 0, frame.info.ny)[::step, ::step]))
    saturation_adu, not_stated = saturation_level(frame.info, settings)
    top = float(np.nanmax(sample))
    is_full = np.mean(sample == np.float32(top)) > LARGEST_FULL_SHARE and top > FAR_ABOVE_SKY_ADU
    full = top if is_full and top != LARGEST_16_BIT else None
    if not_stated and is_full:
        return _Flat(frame, 1.0, USABLE_RANGE[0], level, raw, full)
    linear = min(settings.camera.linear_limit_adu or saturation_adu, saturation_adu)
    fraction = level / (linear - (raw - level))
    lowest = USABLE_RANGE[0] * min(CONVERTER_TOPS_ADU) / saturation_adu if not_stated else 1.0
    return _Flat(frame, fraction, lowest, level, raw, full)


def without_pedestal(frame: Frame, rows: Image, lower: ChosenMasters, first: int, end: int) -> Image:
    """Rows of a flat as read, freed of overscan, bias, dark and shutter; amplifiers brought to one gain."""
    overscan = frame.overscan_rows(first, end)
    light = rows - pedestal_adu(lower, frame.info, slice(first, end))
    if overscan is not None:
        light -= overscan
    if lower.shutter is not None and frame.info.exposure_s:
        delay_s = master_for(lower.shutter, frame.info)[first:end]
        light /= np.float32(1.0) + delay_s / np.float32(frame.info.exposure_s)
    gain = frame.relative_gain(first, end)
    return light if gain is None else light * gain


def _long_enough(flats: list[_Flat], notes: list[str]) -> list[_Flat]:
    short = [flat for flat in flats if (flat.frame.info.exposure_s or SHORTEST_S) < SHORTEST_S]
    if not short:
        return flats
    if len(flats) - len(short) < ENOUGH_GOOD:
        notes.append(f"{len(short)} flats are shorter than {SHORTEST_S:g} s and may show the shutter.")
        return flats
    notes.append(f"{len(short)} of {len(flats)} flats are shorter than {SHORTEST_S:g} s and left out.")
    return [flat for flat in flats if flat not in short]


def _starry(flats: Sequence[_Flat], lower: ChosenMasters) -> list[NDArray[np.bool_] | None]:
    """Pixels under stars or cosmic rays of each flat, by its ratio to the next one; None where a flat stands alone."""
    if len(flats) < 2:
        return [None] * len(flats)
    from scipy.ndimage import binary_dilation, uniform_filter

    def light(flat: _Flat) -> Image:
        ny = flat.frame.info.ny
        return without_pedestal(flat.frame, flat.frame.read(), lower, 0, ny) / np.float32(flat.level_adu)

    found: list[NDArray[np.bool_] | None] = []
    first = mine = light(flats[0])
    for k in range(len(flats)):
        other = light(flats[k + 1]) if k + 1 < len(flats) else first
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.nan_to_num(mine / other, nan=1.0, posinf=1.0, neginf=1.0)
        smooth = uniform_filter(ratio, 3)
        smooth -= uniform_filter(smooth, 31)  # twilight's gradient turns from flat to flat
        sigma = MAD_TO_SIGMA * float(np.median(np.abs(smooth[::3, ::3])))
        bright = smooth > STAR_SIGMA * max(sigma, 1e-6)
        # A dead pixel has a ratio of noise: one that is bright alone is no star.
        found.append(binary_dilation(bright, iterations=STAR_REACH_PX) if bright.any() else np.zeros_like(bright))
        mine = other
    return found


def _divide(flat: _Flat, lower: ChosenMasters, stars: NDArray[np.bool_] | None) -> Prepare:
    at = None if stars is None else np.flatnonzero(stars)

    def prepare(rows: Image, first: int, end: int) -> Image:
        light = without_pedestal(flat.frame, rows, lower, first, end) / np.float32(flat.level_adu)
        if at is not None:
            nx = flat.frame.info.nx
            here = at[np.searchsorted(at, first * nx) : np.searchsorted(at, end * nx)] - first * nx
            light.reshape(-1)[here] = np.nan
        return light

    return prepare


def _detector(
    flats: Sequence[_Flat], kept: Sequence[_Flat], lower: ChosenMasters, settings: Settings
) -> DetectorMeasure:
    full = [flat.full_adu for flat in flats if flat.full_adu is not None]
    timed = [flat for flat in flats if flat.frame.info.exposure_s and flat.full_adu is None and flat.level_adu > 0]
    straight, bent = straightness(
        [flat.frame.info.exposure_s or 0.0 for flat in timed],
        [flat.level_adu for flat in timed],
        [flat.raw_adu for flat in timed],
    )
    gain = gain_err = read_noise_e = None
    pairs = _gain_pairs(kept, lower)
    if pairs:
        gain, gain_err = mean_gain(pairs)
    scale = gain or kept[0].frame.info.gain_e_per_adu or settings.camera.gain_e_per_adu
    if lower.bias is not None and lower.bias.single_noise is not None and scale is not None:
        read_noise_e = read_noise_of(lower.bias.single_noise, scale)
    return DetectorMeasure(
        gain_e_per_adu=gain, gain_err=gain_err, n_pairs=len(pairs), read_noise_e=read_noise_e,
        straight_to_adu=straight, bent_from_adu=bent, full_adu=min(full) if full else None,
    )  # fmt: skip


def _gain_pairs(flats: Sequence[_Flat], lower: ChosenMasters) -> list[tuple[float, float]]:
    """Gains of pairs of neighbouring flats in the middle of the frame."""
    noisy = lower.bias or lower.dark
    if noisy is None or noisy.single_noise is None:
        return []
    found: list[tuple[float, float]] = []
    for a, b in zip(flats[::2], flats[1::2], strict=False):
        if len(found) == MOST_PAIRS or abs(a.level_adu / b.level_adu - 1.0) > PAIR_LEVELS:
            continue
        middle = [_middle(flat, lower) for flat in (a, b)]
        try:
            found.append(pair_gain(middle[0], middle[1], noisy.single_noise**2))
        except ValueError:
            continue
    return found


def _middle(flat: _Flat, lower: ChosenMasters) -> Image:
    ny, nx = flat.frame.info.ny, flat.frame.info.nx
    first, left = max(0, (ny - PAIR_SIDE_PX) // 2), max(0, (nx - PAIR_SIDE_PX) // 2)
    end = min(ny, first + PAIR_SIDE_PX)
    light = without_pedestal(flat.frame, flat.frame.read_rows(first, end), lower, first, end)
    return light[:, left : left + PAIR_SIDE_PX]
