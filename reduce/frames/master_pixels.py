"""Pixels of masters, cut to the frame they serve, and the level that they say a frame stands on."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

import numpy as np

from reduce.frames.combine import MAD_TO_SIGMA
from reduce.frames.master_sets import ChosenMasters, Master, Signature, same_exposure
from reduce.plain_text import clean_text
from reduce.records import Floats, FrameError, FrameInfo, Image

GLOW_BLOCKS = 16
"""Blocks a side in which the glow of an amplifier is looked for."""
GLOW_SIGMA, GLOW_FLOOR_ADU = 6.0, 0.5
GLOW_SHARE = 0.5
"""A structure above so much of the typical dark signal is a glow, where no second dark can show that it scales."""
SCALES_WITHIN = 0.1
"""Relative; a structure that grows with time follows the exposures so closely."""


@lru_cache(maxsize=8)
def read_master(path: Path) -> Image:
    """Pixels of a master, (ny, nx) float32, read-only; kept, as a night uses the same few again and again.

    Raises
    ------
    FrameError
        The file is gone or damaged.
    """
    from astropy.io import fits

    try:
        data = np.ascontiguousarray(fits.getdata(path, memmap=False), dtype=np.float32)
    except Exception as error:  # astropy raises many kinds for a damaged file
        raise FrameError(f"master frame {clean_text(path.name)} cannot be read; reduce again to rebuild it.") from error
    data.flags.writeable = False
    return data


def master_for(master: Master, info: FrameInfo) -> Image:
    """Pixels of a master that suits, cut to the window of the frame."""
    x, y = master.signature.offset(Signature.of(info)) or (0, 0)
    return read_master(master.path)[y : y + info.ny, x : x + info.nx]


def pedestal_adu(chosen: ChosenMasters, info: FrameInfo, rows: slice = slice(None)) -> Image:
    """Bias level and dark signal to subtract from (rows of) a frame, ADU; needs a bias or a dark.

    Without a dark of the same exposure: bias + (dark - bias) t / t_dark; the bias alone where the dark does not scale.
    """
    if chosen.dark is not None and (chosen.bias is None or same_exposure(chosen.dark.exposure_s, info.exposure_s)):
        return master_for(chosen.dark, info)[rows]
    assert chosen.bias is not None
    bias = master_for(chosen.bias, info)[rows]
    if chosen.dark is None or why_not_scaled(chosen, info):
        return bias
    factor = np.float32(dark_factor(chosen, info.exposure_s))
    return np.asarray(bias + (master_for(chosen.dark, info)[rows] - bias) * factor, dtype=np.float32)


def dark_factor(chosen: ChosenMasters, exposure_s: float | None) -> float:
    """How much longer the frame is than the dark; 1 when they are the same or the frame's length is not known."""
    dark_s = chosen.dark.exposure_s if chosen.dark is not None else None
    if not dark_s or exposure_s is None or same_exposure(dark_s, exposure_s):
        return 1.0
    return exposure_s / dark_s


def why_not_scaled(chosen: ChosenMasters, info: FrameInfo) -> str:
    """A sentence when the dark would have to be scaled and must not, '' otherwise.

    The glow of an amplifier depends on the read-out more than on time. A dark with such a structure is scaled only
    when one of another exposure shows that it grows as time does.
    """
    dark, bias = chosen.dark, chosen.bias
    if dark is None or bias is None or same_exposure(dark.exposure_s, info.exposure_s):
        return ""
    name = f"the dark of {dark.exposure_s:g} s shows the glow of an amplifier"
    glow, sigma, typical = _glow(dark, bias)
    other = chosen.other_dark
    if other is not None and other.exposure_s and dark.exposure_s:
        second, second_sigma, _ = _glow(other, bias)
        ratio = other.exposure_s / dark.exposure_s
        miss = np.abs(second - ratio * glow)
        room = GLOW_SIGMA * np.hypot(second_sigma, ratio * sigma) + GLOW_FLOOR_ADU
        if (miss > room + SCALES_WITHIN * np.maximum(np.abs(second), ratio * np.abs(glow))).any():
            return f"{name}, which does not grow with time as that of {other.exposure_s:g} s shows; it was not scaled."
        return ""
    if float(glow.max()) > max(GLOW_SIGMA * sigma + GLOW_FLOOR_ADU, GLOW_SHARE * typical):
        return f"{name}; it was not scaled: take darks of {info.exposure_s:g} s."
    return ""


@lru_cache(maxsize=8)
def _glow(dark: Master, bias: Master) -> tuple[Floats, float, float]:
    """Dark signal of blocks above the typical one, its noise, and the typical one; ADU."""
    at = bias.signature.offset(dark.signature)
    if at is None:  # a bias of a small window cannot tell
        return np.zeros((1, 1)), 0.0, 0.0
    x, y = at
    level = read_master(bias.path)[y : y + dark.signature.ny, x : x + dark.signature.nx]
    signal = read_master(dark.path) - level
    blocks, n = block_medians(signal, GLOW_BLOCKS)
    typical = float(np.median(blocks))
    sigma = MAD_TO_SIGMA * float(np.nanmedian(np.abs(signal - np.nanmedian(signal)))) * 1.2533 / np.sqrt(n)
    return blocks - typical, sigma, typical


def block_medians(image: Image, n_side: int) -> tuple[Floats, int]:
    """Medians of ``n_side`` × ``n_side`` blocks that cover an image, and the pixels of one."""
    ny, nx = image.shape
    rows = [slice(k * ny // n_side, (k + 1) * ny // n_side) for k in range(min(n_side, ny))]
    columns = [slice(k * nx // n_side, (k + 1) * nx // n_side) for k in range(min(n_side, nx))]
    medians = np.array([[np.nanmedian(image[y, x]) for x in columns] for y in rows], float)
    return medians, max(1, (ny // n_side) * (nx // n_side))


def enlarged(grid: Floats, shape: tuple[int, int]) -> Image:
    """A grid of blocks as an image: bilinear between the middles of the blocks, level outside."""
    ny, nx = shape
    rows = np.clip((np.arange(ny) + 0.5) * grid.shape[0] / ny - 0.5, 0.0, grid.shape[0] - 1.0)
    columns = np.clip((np.arange(nx) + 0.5) * grid.shape[1] / nx - 0.5, 0.0, grid.shape[1] - 1.0)
    j, i = (np.minimum(at.astype(int), n - 2) for at, n in ((rows, grid.shape[0]), (columns, grid.shape[1])))
    v, u = (rows - j)[:, None], (columns - i)[None, :]
    j, i = j[:, None], i[None, :]
    below = grid[j, i] * (1.0 - u) + grid[j, i + 1] * u
    above = grid[j + 1, i] * (1.0 - u) + grid[j + 1, i + 1] * u
    return np.asarray(below * (1.0 - v) + above * v, np.float32)
