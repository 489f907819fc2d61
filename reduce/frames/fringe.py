"""Fringes of a thinned detector: thin-film interference of the night sky's lines, from frames of several pointings.

The pattern is fixed on the detector and follows the sky in strength; stars stand elsewhere at every pointing. It is
used only for the bands that ``fringe_bands`` under [camera] names.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from reduce.frames.combine import MAD_TO_SIGMA
from reduce.frames.flats import Prepare, without_pedestal
from reduce.frames.master_pixels import block_medians, enlarged, master_for
from reduce.frames.master_sets import ChosenMasters
from reduce.frames.reader import Frame
from reduce.records import FrameError, Image, Mask

BLOCKS = 6
"""Blocks a side of the background below the fringes: they are much narrower."""
STAR_SIGMA, STAR_REACH_PX = 2.5, 4
SMOOTH_PX = 1.5
"""Fringes are wider than stars: the pattern loses noise by this Gaussian and nothing else."""
SIGNIFICANT = 3.0
"""Scatter of the smoothed pattern over its noise from which on there are fringes."""


def prepare_skies(frames: Sequence[Frame], lower: ChosenMasters) -> list[Prepare]:
    """How to make each frame a picture of its sky's structure, as a fraction of the sky; stars become NaN.

    Raises
    ------
    FrameError
        There is no flat of the band.
    """
    if lower.flat is None:
        raise FrameError("fringes need flats of their band: take some.")
    made = [_structure(frame, lower) for frame in frames]

    def rows_of(image: Image) -> Prepare:
        return lambda rows, first, end: image[first:end]

    return [rows_of(image) for image in made]


def _structure(frame: Frame, lower: ChosenMasters) -> Image:
    assert lower.flat is not None
    light = without_pedestal(frame, frame.read(), lower, 0, frame.info.ny) / master_for(lower.flat, frame.info)
    sky = float(np.nanmedian(light))
    if not sky > 0:
        raise FrameError("a frame for the fringes holds no sky.")
    structure = _flattened(light) / np.float32(sky)
    structure[_stars(structure)] = np.nan
    return structure


def _flattened(light: Image) -> Image:
    return np.asarray(light - enlarged(block_medians(light, BLOCKS)[0], light.shape), np.float32)


def _stars(structure: Image) -> NDArray[np.bool_]:
    from scipy.ndimage import binary_dilation, uniform_filter

    smooth = uniform_filter(np.nan_to_num(structure), 3)
    bright = smooth > STAR_SIGMA * _sigma(smooth)
    return np.asarray(binary_dilation(bright, iterations=STAR_REACH_PX) | ~np.isfinite(structure))


def _sigma(image: Image) -> float:
    sample = image[::3, ::3]
    return MAD_TO_SIGMA * float(np.nanmedian(np.abs(sample - np.nanmedian(sample))))


def finished(pattern: Image, noise: float | None, notes: list[str]) -> Image:
    """The combined pattern without its noise; 0 everywhere where there are no fringes. ``notes`` says how strong."""
    from scipy.ndimage import gaussian_filter

    smooth = gaussian_filter(np.nan_to_num(pattern - np.nanmedian(pattern)), SMOOTH_PX)
    left = (noise or 0.0) / (2.0 * np.sqrt(np.pi) * SMOOTH_PX)
    rms = _sigma(smooth)
    if not rms > SIGNIFICANT * left:
        notes.append("the sky of this band shows no fringes.")
        return np.zeros_like(pattern)
    notes.append(f"fringes of {100.0 * rms:.2f} % of the sky.")
    return np.asarray(smooth, np.float32)


def fringe_strength(data_e: Image, mask: Mask, pattern: Image) -> float:
    """Electrons that the pattern is to be multiplied by, by least squares on what is neither star nor bad pixel."""
    flat = _flattened(np.where(mask == 0, data_e, np.float32(np.nanmedian(data_e))))
    clear = (mask == 0) & ~_stars(flat)
    weight = float(np.sum(pattern[clear].astype(np.float64) ** 2))
    return float(np.sum(flat[clear].astype(np.float64) * pattern[clear])) / weight if weight > 0 else 0.0
