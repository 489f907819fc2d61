"""Stamp packs: the pixels about the target and some stars of a frame, small enough to keep for ever.

A pack is the four bytes ``FST1`` and a zlib stream of: length of the description (u4), the description (JSON), and for
each stamp its light and variance (i4, in the steps that the description states) and mask (u1), row by row; all little
endian. Light is kept in steps of 1/16 of the sky's noise, so rounding adds 0.02 % to the noise; variance in steps of
1/64 of its median. No clock, no machine and no random number enters: equal input gives equal bytes.

Size: about 33 kB a frame for a target of 60 × 60 pixels and 40 stars of 25 × 25 (1 byte of light in a pixel of sky).
"""

from __future__ import annotations

import json
import math
import struct
import zlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.plain_text import PlainError, clean_text
from reduce.records import CalibratedImage, FieldSolution, Image, Mask, StarFlag

MAGIC = b"FST1"
TARGET_FWHM, TARGET_ARCSEC = 15.0, 60.0
"""Side of a target's stamp: the larger of the two."""
STAR_FWHM, STAR_ARCSEC = 8.0, 24.0
"""Side of a star's: what a frame of much worse seeing spreads a star over, when this one serves as its reference."""
MOST_STARS = 40
STEPS_PER_SIGMA = 16.0
VARIANCE_STEPS = 64.0
LARGEST_SIDE_PX = 1024
LARGEST_BYTES = 64 * 1024 * 1024
"""Of an unpacked pack; a larger one is refused before it fills the memory."""
LARGEST_STEP = 2**31 - 1


class StampError(PlainError):
    """A stamp pack that cannot be used."""


@dataclass(frozen=True, slots=True)
class Stamp:
    """Cut-out about one star; pixel (0, 0) of the arrays is pixel (x0, y0) of the frame."""

    target: str
    """Name of the target, '' for a field star."""
    x0: int
    y0: int
    x_px: float
    """Position of the star on the frame."""
    y_px: float
    ra_deg: float
    dec_deg: float
    sky_e_px: float
    data_e: Image
    variance_e2: Image
    """Without photon noise, as in CalibratedImage, but for the part by which the flat raised that of the sky."""
    mask: Mask


def target_half_px(fwhm_px: float, scale_arcsec: float) -> int:
    """Pixels from a target to the border of its stamp; on a galaxy, what is detected so near may be part of it."""
    return math.ceil(max(TARGET_FWHM * fwhm_px, TARGET_ARCSEC / scale_arcsec) / 2.0)


@dataclass(frozen=True, slots=True)
class StampPack:
    """Stamps of one frame: targets first, then stars from bright to faint.

    ``cd_deg`` is the frame's; about each star, offsets on the sky are ``cd · (pixel - (x_px, y_px))``.
    """

    fwhm_px: float
    cd_deg: tuple[tuple[float, float], tuple[float, float]]
    gain_e_per_adu: float
    stamps: tuple[Stamp, ...]

    @property
    def scale_arcsec(self) -> float:
        """Of one pixel."""
        (a, b), (c, d) = self.cd_deg
        return math.sqrt(abs(a * d - b * c)) * 3600.0


def pack(image: CalibratedImage, table: NDArray[Any], fwhm_px: float, solution: FieldSolution) -> bytes:
    """Pack of one frame.

    Parameters
    ----------
    table
        STAR_DTYPE rows of the frame: all targets (role 1) and the 40 brightest field stars are kept, saturated
        ones after all others.
    """
    ny, nx = image.data_e.shape
    target_half = target_half_px(fwhm_px, solution.scale_arcsec)
    star_half = math.ceil(max(STAR_FWHM * fwhm_px, STAR_ARCSEC / solution.scale_arcsec) / 2.0)
    described, blocks = [], []
    for row in _chosen(table):
        half = min(target_half if row["role"] == 1 else star_half, (LARGEST_SIDE_PX - 1) // 2)
        column, line = round(float(row["x_px"])), round(float(row["y_px"]))
        x0, x1 = max(column - half, 0), min(column + half + 1, nx)
        y0, y1 = max(line - half, 0), min(line + half + 1, ny)
        if x1 <= x0 or y1 <= y0:
            continue
        at = np.s_[y0:y1, x0:x1]
        light, light_step = _quantised(image.data_e[at], _noise(row, image.variance_e2[at]) / STEPS_PER_SIGMA)
        noise = _variance(image, at, float(row["sky_e_px"]))
        variance, variance_step = _quantised(noise, _middle(noise) / VARIANCE_STEPS)
        described.append({
            "target": str(row["target"]), "x0": x0, "y0": y0, "nx": x1 - x0, "ny": y1 - y0,
            "x": float(row["x_px"]), "y": float(row["y_px"]),
            "ra": _known(row["ra_deg"]), "dec": _known(row["dec_deg"]), "sky": _known(row["sky_e_px"]),
            "light_step": light_step, "variance_step": variance_step,
        })  # fmt: skip
        blocks += [_planes(light), _planes(variance), np.ascontiguousarray(image.mask[at], np.uint8).tobytes()]
    header = {
        "fwhm": float(fwhm_px), "cd": solution.cd_deg, "gain": float(image.gain_e_per_adu), "stamps": described,
    }  # fmt: skip
    text = json.dumps(header, sort_keys=True, allow_nan=False).encode()
    return MAGIC + zlib.compress(struct.pack("<I", len(text)) + text + b"".join(blocks), 6)


def unpack(content: bytes) -> StampPack:
    """Stamps of a pack; pixels without a number come back as NaN.

    Raises
    ------
    StampError
        The bytes are no pack, are cut short, or would unpack to more than 64 MB.
    """
    body = _body(content)
    try:
        (length,) = struct.unpack_from("<I", body)
        header = json.loads(body[4 : 4 + length])
        rest, at, stamps = memoryview(body), 4 + length, []
        for entry in header["stamps"]:
            nx, ny = int(entry["nx"]), int(entry["ny"])
            if not (0 < nx <= LARGEST_SIDE_PX and 0 < ny <= LARGEST_SIDE_PX and at + 9 * nx * ny <= len(body)):
                raise StampError("The stamp pack is damaged; measure its frame again.")
            light, variance = rest[at : at + 4 * nx * ny], rest[at + 4 * nx * ny : at + 8 * nx * ny]
            mask = np.frombuffer(rest[at + 8 * nx * ny : at + 9 * nx * ny], np.uint8).reshape(ny, nx)
            at += 9 * nx * ny
            stamps.append(
                Stamp(
                    clean_text(entry["target"]), int(entry["x0"]), int(entry["y0"]),
                    float(entry["x"]), float(entry["y"]), _number(entry["ra"]), _number(entry["dec"]),
                    _number(entry["sky"]), _restored(light, (ny, nx), float(entry["light_step"])),
                    _restored(variance, (ny, nx), float(entry["variance_step"])), mask.copy(),
                )
            )  # fmt: skip
        (a, b), (c, d) = header["cd"]
        cd = ((float(a), float(b)), (float(c), float(d)))
        return StampPack(float(header["fwhm"]), cd, float(header["gain"]), tuple(stamps))
    except (ValueError, KeyError, TypeError, RecursionError, OverflowError, struct.error) as error:
        raise StampError("The stamp pack is damaged; measure its frame again.") from error


def _body(content: bytes) -> bytes:
    if content[:4] != MAGIC:
        raise StampError("These bytes are no stamp pack; measure the frame again.")
    stream = zlib.decompressobj()
    try:
        body = stream.decompress(content[4:], LARGEST_BYTES)
    except zlib.error as error:
        raise StampError("The stamp pack is damaged; measure its frame again.") from error
    if stream.unconsumed_tail:
        raise StampError("The stamp pack is larger than 64 MB; measure its frame again.")
    if not stream.eof:
        raise StampError("The stamp pack is cut short; measure its frame again.")
    return body


def _chosen(table: NDArray[Any]) -> NDArray[Any]:
    """Targets by name, then the brightest stars; a saturated one tells neither blur nor light."""
    targets, stars = table[table["role"] == 1], table[table["role"] == 0]
    targets = targets[np.argsort(targets["target"], kind="stable")]
    brightness = np.nan_to_num(stars["flux_e"][:, 4], nan=-np.inf)
    saturated = stars["flags"][:, 4] & int(StarFlag.SATURATED) != 0
    return np.concatenate([targets, stars[np.lexsort((-brightness, saturated))][:MOST_STARS]])


def _variance(image: CalibratedImage, at: tuple[slice, slice], sky_e_px: float) -> Image:
    """Where a flat divided by s, the sky's photons have sky/s electrons² of noise; whoever uses a stamp adds sky."""
    if image.sensitivity is None or not sky_e_px > 0:
        return image.variance_e2[at]
    return image.variance_e2[at] + np.float32(sky_e_px) * (np.float32(1.0) / image.sensitivity[at] - np.float32(1.0))


def _noise(row: Any, variance_e2: Image) -> float:
    """Noise of one pixel of sky."""
    sigma = float(row["sky_sigma_e_px"])
    return sigma if math.isfinite(sigma) and sigma > 0 else _middle(variance_e2) ** 0.5


def _middle(values: Image) -> float:
    known = values[np.isfinite(values) & (values > 0)]
    return float(np.median(known)) if len(known) else 1.0


def _quantised(values: Image, step: float) -> tuple[NDArray[np.int32], float]:
    """Whole steps, -2³¹ for no number; the step grows where the values would not fit."""
    known = np.isfinite(values)
    largest = float(np.abs(values[known], dtype=np.float64).max(initial=0.0))
    step = max(step, largest / LARGEST_STEP * 1.001, 1e-30)
    steps = np.rint(np.where(known, values, 0.0).astype(np.float64) / step)
    return np.where(known, steps, -(2**31)).astype("<i4"), step


def _restored(raw: memoryview, shape: tuple[int, int], step: float) -> Image:
    planes = np.frombuffer(raw, np.uint8).reshape(4, -1)
    steps = np.ascontiguousarray(planes.T).view("<i4").reshape(shape)
    with np.errstate(over="ignore"):
        return np.where(steps == -(2**31), np.nan, steps * step).astype(np.float32)


def _planes(values: NDArray[np.int32]) -> bytes:
    """All lowest bytes first, then the next: the high ones are alike and shrink to nothing."""
    return np.ascontiguousarray(values.reshape(-1, 1).view(np.uint8).T).tobytes()


def _known(value: Any) -> float | None:
    return float(value) if np.isfinite(value) else None


def _number(value: Any) -> float:
    return float("nan") if value is None else float(value)
