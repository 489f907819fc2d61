"""From raw counts to electrons with a noise model: bias, dark, flat, mask, variance."""

from __future__ import annotations

import numpy as np

from reduce.frames.combine import MAD_TO_SIGMA
from reduce.frames.detector import DIGITISATION_ADU, converter_step_adu, saturation_level, stated_value
from reduce.frames.fringe import fringe_strength
from reduce.frames.master_pixels import dark_factor, master_for, pedestal_adu, why_not_scaled
from reduce.frames.master_sets import ChosenMasters, Master, same_exposure
from reduce.records import CalibratedImage, FrameError, FrameInfo, Image, Mask, PixelFlag
from reduce.settings import Settings

LEAST_FLAT, MOST_FLAT = 0.3, 3.0
"""A pixel whose sensitivity lies outside, relative to the median, is bad."""
HOT_SIGMA = 20.0
OWN_DARK_SIGMA = 5.0
"""A pixel that stands out of the dark by so much has a dark current of its own; all others share the typical one."""


def calibrate(
    adu: Image,
    info: FrameInfo,
    chosen: ChosenMasters,
    settings: Settings,
    *,
    overscan_adu: Image | None = None,
    relative_gain: Image | None = None,
) -> CalibratedImage:
    """A raw image in electrons, with mask and variance; pure but for reading the masters.

    Parameters
    ----------
    adu
        (ny, nx) raw counts.
    info
        Of the same frame; its gain, read noise and saturation win over the settings' unless these override it.
    chosen
        From `choose_masters`.
    overscan_adu, relative_gain
        (ny, nx) level of the overscan, and gain of each pixel's amplifier over the frame's; None where there is none.

    Raises
    ------
    FrameError
        Gain or read noise is stated nowhere, and no flats tell.
    """
    mine, camera = chosen.flat.detector if chosen.flat is not None else None, settings.camera
    stated = stated_value(info.gain_e_per_adu, camera.gain_e_per_adu, settings)
    gain = _known(stated, mine.gain_e_per_adu if mine is not None else None, "gain", "gain_e_per_adu")
    stated = stated_value(info.read_noise_e, camera.read_noise_e, settings)
    read_noise_e = _known(stated, mine.read_noise_e if mine is not None else None, "read noise", "read_noise_e")
    saturation_adu, note = saturation_level(info, settings, adu)
    notes = [*chosen.notes, *([note] if note else [])]

    mask = np.zeros(adu.shape, np.uint8)
    mask[adu >= saturation_adu] |= np.uint8(PixelFlag.SATURATED)
    mask[~np.isfinite(adu)] |= np.uint8(PixelFlag.NOT_FINITE)

    level: Image | np.float32 = np.float32(info.pedestal_adu or 0.0)
    if chosen.bias is not None or chosen.dark is not None:
        level = pedestal_adu(chosen, info)
        if unscaled := why_not_scaled(chosen, info):
            notes.append(unscaled)
    elif not info.calibrated and info.pedestal_adu is None and overscan_adu is None:
        notes.append(
            "neither bias nor dark was subtracted: sky and its noise are overestimated by the camera's offset."
        )
    if overscan_adu is not None:
        level = level + overscan_adu
    data = (adu - level) * np.float32(gain)
    variance = _dark_e(info, chosen, settings, gain, mask, notes)
    step_e = gain * converter_step_adu(adu) * DIGITISATION_ADU
    variance += np.float32(read_noise_e**2 + step_e**2)
    variance += np.float32(_masters_variance_e2(info, chosen, gain, read_noise_e))
    if relative_gain is not None:
        data *= relative_gain

    if chosen.shutter is not None and info.exposure_s:
        data /= np.float32(1.0) + master_for(chosen.shutter, info) / np.float32(info.exposure_s)
    relative_flat_error = 0.0
    flat: Image | None = None
    if chosen.flat is not None:
        flat = master_for(chosen.flat, info)
        bad = ~((flat >= LEAST_FLAT) & (flat <= MOST_FLAT))
        mask[bad] |= np.uint8(PixelFlag.BAD)
        flat = np.where(bad, np.float32(1.0), flat)
        data /= flat
        variance /= flat**2
        relative_flat_error = chosen.flat.noise or 0.0
    if chosen.fringe is not None:
        pattern = master_for(chosen.fringe, info)
        strength_e = fringe_strength(data, mask, pattern)
        data -= np.float32(strength_e) * pattern
        notes.append(f"fringes of {float(np.std(pattern)) * abs(strength_e):.1f} e- rms were subtracted.")
    return CalibratedImage(
        data_e=data,
        variance_e2=variance,
        mask=mask,
        flat_used=chosen.flat is not None or "flat" in info.calibrated,
        gain_e_per_adu=gain,
        read_noise_e=read_noise_e,
        saturation_e=(saturation_adu - float(np.nanmedian(level))) * gain,
        relative_flat_error=relative_flat_error,
        sensitivity=flat,
        notes=tuple(notes),
    )


def _known(stated: float | None, measured: float | None, name: str, key: str) -> float:
    value = measured if stated is None else stated
    if value is None:
        raise FrameError(f"the {name} is not known; write {key} under [camera] in observatory.toml.")
    return value


def _dark_e(
    info: FrameInfo, chosen: ChosenMasters, settings: Settings, gain: float, mask: Mask, notes: list[str]
) -> Image:
    """Expected dark electrons of each pixel, whose noise is their root; marks hot pixels in ``mask``.

    Where a pixel does not stand out, the typical dark current is taken: its own would carry the master's noise, and cut
    at zero be too large on average.
    """
    if chosen.dark is None:
        rate = settings.camera.dark_e_per_s
        if rate is None:
            notes.append("the dark current is not known and was left out of the noise.")
        return np.full(mask.shape, (rate or 0.0) * (info.exposure_s or 0.0), np.float32)
    dark = master_for(chosen.dark, info)
    signal = dark - master_for(chosen.bias, info) if chosen.bias is not None else dark - np.nanmedian(dark)
    typical = float(np.nanmedian(signal))
    above = signal - np.float32(typical)
    sigma = MAD_TO_SIGMA * float(np.nanmedian(np.abs(above)))
    mask[~(above <= HOT_SIGMA * sigma)] |= np.uint8(PixelFlag.BAD)
    if chosen.bias is None:
        rate = settings.camera.dark_e_per_s or 0.0
        typical = rate * (chosen.dark.exposure_s or 0.0) / gain
    expected = np.where(above > OWN_DARK_SIGMA * sigma, typical + above, typical)
    expected = np.where(np.isfinite(expected), np.maximum(expected, 0.0), 0.0)
    return (expected * gain * dark_factor(chosen, info.exposure_s)).astype(np.float32)


def _masters_variance_e2(info: FrameInfo, chosen: ChosenMasters, gain: float, read_noise_e: float) -> float:
    """Noise that subtracting the masters adds to each pixel, e-²."""
    factor = dark_factor(chosen, info.exposure_s)
    dark_weight = factor if chosen.dark is not None and not why_not_scaled(chosen, info) else 0.0
    bias_weight = 1.0 - dark_weight if chosen.dark is None or not _exact(info, chosen) else 0.0
    total = 0.0
    for master, weight in ((chosen.bias, bias_weight), (chosen.dark, dark_weight)):
        if master is not None:
            total += (weight * _noise_e(master, gain, read_noise_e)) ** 2
    return total


def _exact(info: FrameInfo, chosen: ChosenMasters) -> bool:
    return chosen.dark is not None and same_exposure(chosen.dark.exposure_s, info.exposure_s)


def _noise_e(master: Master, gain: float, read_noise_e: float) -> float:
    """As measured from its inputs; a master of one frame has the noise of a read-out."""
    return master.noise * gain if master.noise is not None else read_noise_e
