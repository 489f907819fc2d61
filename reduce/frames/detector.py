"""Gain, read noise and saturation: measured from pairs of frames, or where to find them."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from reduce.frames.combine import CLIP_SIGMA, MAD_TO_SIGMA
from reduce.records import FrameInfo, Image
from reduce.settings import Settings

DIGITISATION_ADU = 1.0 / math.sqrt(12.0)
"""Standard deviation of rounding to whole numbers, uniform over one step."""
LARGEST_16_BIT = 65535.0
CONVERTER_TOPS_ADU = (4095.0, 16383.0, 32767.0, 65520.0, 65532.0, 65535.0)
"""Largest numbers of converters of 12, 14, 15 and 16 bits, and of 12 and 14 bits stored as 16."""
STORED_STEPS = (2, 4, 8, 16, 32, 64)
LEAST_NUMBERS = 8
"""Different numbers in a frame from which their common step says something."""
PILED_PIXELS = 3
"""So many pixels with exactly the highest value of a frame do not happen to real light that is far above the sky."""
FAR_ABOVE_SKY_ADU = 1000.0
LARGEST_FULL_SHARE = 0.02
"""Of an image: stars do not cover more; where more is at the top, it is a flat or twilight."""


def gain_from_pairs(
    flat_levels_adu: tuple[float, float],
    bias_levels_adu: tuple[float, float],
    flat_difference_sd_adu: float,
    bias_difference_sd_adu: float,
) -> float:
    """Gain, e-/ADU, from two flats of one level and two biases: the photon transfer of Janesick.

    ``[(F1 + F2) - (B1 + B2)] / [var(F1 - F2) - var(B1 - B2)]``; the difference of two frames frees the noise from the
    pattern of the pixels.

    Raises
    ------
    ValueError
        The flats are not noisier than the biases.
    """
    noise = flat_difference_sd_adu**2 - bias_difference_sd_adu**2
    signal = sum(flat_levels_adu) - sum(bias_levels_adu)
    if noise <= 0 or signal <= 0:
        raise ValueError("the flats must be brighter and noisier than the biases.")
    return signal / noise


def read_noise_from_pair(bias_difference_sd_adu: float, gain_e_per_adu: float) -> float:
    """Read noise, e-, from the standard deviation of the difference of two biases, ADU."""
    return gain_e_per_adu * bias_difference_sd_adu / math.sqrt(2.0)


def pair_statistics(first: ArrayLike, second: ArrayLike) -> tuple[tuple[float, float], float]:
    """Levels of two frames and the standard deviation of their difference, ADU; single odd pixels are left out."""
    a, b = np.asarray(first, np.float64), np.asarray(second, np.float64)
    difference = a - b
    off = np.abs(difference - np.median(difference))
    inside = off <= CLIP_SIGMA * max(MAD_TO_SIGMA * float(np.median(off)), DIGITISATION_ADU)
    return (float(np.median(a)), float(np.median(b))), float(np.std(difference[inside], ddof=1))


def converter_step_adu(adu: Image) -> float:
    """Step between the numbers of a frame: 16 or 4 where those of 12 or 14 bits are stored as 16, mostly 1."""
    sample = adu[::5, ::5].ravel()
    sample = sample[np.isfinite(sample)]
    if len(sample) == 0 or (np.abs(sample) > LARGEST_16_BIT).any() or (sample != np.rint(sample)).any():
        return 1.0
    whole = np.unique(sample.astype(np.int64))
    if len(whole) < LEAST_NUMBERS:
        return 1.0
    step = int(np.gcd.reduce(np.diff(whole)))
    return float(step) if step in STORED_STEPS else 1.0


def stated_value(header: float | None, setting: float | None, settings: Settings) -> float | None:
    """What a header or the settings say; the header wins unless the observer says that it is wrong."""
    first, second = (setting, header) if settings.camera.overrides_header else (header, setting)
    return second if first is None else first


def converter_top_adu(adu: Image) -> float | None:
    """Highest value of a frame when it is the converter's top and not the light's: ADU, or None."""
    top = float(np.nanmax(adu))
    full = int(np.count_nonzero(adu == np.float32(top)))
    if top < float(np.nanmedian(adu[::8, ::8])) + FAR_ABOVE_SKY_ADU or full > LARGEST_FULL_SHARE * adu.size:
        return None
    return top if full >= PILED_PIXELS or top in CONVERTER_TOPS_ADU else None


def saturation_level(info: FrameInfo, settings: Settings, adu: Image | None = None) -> tuple[float, str]:
    """Raw level, ADU, at which a pixel is full, and a sentence when nobody states it.

    Where nobody does, the pixels of the frame itself may show the converter's top.
    """
    stated = stated_value(info.saturation_adu, settings.camera.saturation_adu, settings)
    if stated is not None:
        last_adu = LARGEST_16_BIT + 1.0 - converter_step_adu(adu) if adu is not None else stated
        # Of 12 bits stored as 16 the top is 65520: 65535 is never reached.
        return min(stated, last_adu) if last_adu > 0.9 * stated else stated, ""
    top_adu = converter_top_adu(adu) if adu is not None else None
    if top_adu is not None and top_adu != LARGEST_16_BIT:
        return top_adu, (
            f"no saturation level is stated; {top_adu:.0f} ADU was taken, where the pixels of this frame pile up "
            "(saturation_adu under [camera])."
        )
    return LARGEST_16_BIT, "no saturation level is stated; 65535 ADU was assumed (saturation_adu under [camera])."
