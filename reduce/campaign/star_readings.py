"""What the logbook knows of every star of one frame, for a person who points at one."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from reduce.field.sequence import cross_match
from reduce.plain_text import clean_text
from reduce.records import LADDER_FWHM, PSF_COLUMN, FrameZeroPoint, Measured, StarFlag
from reduce.records import Sequence as ComparisonSequence
from reduce.views import StarReading

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

MATCH_ARCSEC = 2.0
FORCED = int(StarFlag.NO_CENTROID)
"""True of every target: it is measured where it is known to be."""
_DEFAULT_RADIUS = LADDER_FWHM.index(1.5)
"""Of a frame that has no zero point."""


def star_readings(campaign: Campaign, frame: str) -> tuple[StarReading, ...]:
    """Every measured star of a frame, targets as their host's light left them; nothing for one not measured."""
    rows = [row for row in (*campaign.measured(), *campaign.reference_rows()) if row.frame == frame]
    if not rows:
        return ()
    return readings_of(rows[0], campaign.solution().zero_points.get(frame), campaign.sequence())


def readings_of(
    measured: Measured, zero_point: FrameZeroPoint | None, sequence: ComparisonSequence
) -> tuple[StarReading, ...]:
    """The stars of one measured frame, in the aperture of its zero point."""
    stars, info = measured.stars, measured.info
    if not len(stars):
        return ()
    there = cross_match(stars["ra_deg"], stars["dec_deg"], sequence.ra_deg, sequence.dec_deg, MATCH_ARCSEC)
    scale = measured.solution.scale_arcsec if measured.solution is not None else None
    exposure_s = info.exposure_s if info is not None else None
    column = _column(zero_point)
    readings = []
    for star, k in zip(stars, there, strict=True):
        is_target = bool(star["role"] == 1)
        name = clean_text(str(star["target"])) if is_target else clean_text(sequence.ids[k]) if k >= 0 else ""
        flux, err, flags = _light(star, column)
        snr = flux / err if err > 0 and np.isfinite(flux) else None
        mag = None
        if zero_point is not None and exposure_s and snr is not None and flux > 0:
            mag = zero_point.zp_mag - 2.5 * float(np.log10(flux / exposure_s))
        readings.append(
            StarReading(
                name=name, is_target=is_target, x_px=float(star["x_px"]), y_px=float(star["y_px"]), mag=mag,
                mag_err=2.5 / float(np.log(10.0)) / snr if mag is not None and snr else None, snr=snr,
                peak_adu=_known(star["peak_adu"]),
                fwhm_arcsec=float(star["fwhm_px"]) * scale if scale and np.isfinite(star["fwhm_px"]) else None,
                elongation=_known(star["elongation"]), growth_mag=_growth(star),
                flags=_words(flags & ~FORCED if is_target else flags),
            )
        )  # fmt: skip
    return tuple(readings)


def _column(zero_point: FrameZeroPoint | None) -> int:
    """Where the frame's way of measuring stands."""
    if zero_point is None:
        return _DEFAULT_RADIUS
    return PSF_COLUMN if zero_point.aperture_fwhm == 0 else LADDER_FWHM.index(zero_point.aperture_fwhm)


def _light(star: Any, column: int) -> tuple[float, float, int]:
    if column == PSF_COLUMN:
        return float(star["psf_flux_e"]), float(star["psf_flux_err_e"]), int(star["psf_flags"])
    return float(star["flux_e"][column]), float(star["flux_err_e"][column]), int(star["flags"][column])


def _growth(star: Any) -> tuple[float, ...]:
    light = np.asarray(star["flux_e"][: len(LADDER_FWHM)], float)
    share = np.divide(light, light[-1], out=np.full_like(light, np.nan), where=light[-1] > 0)
    logarithm = np.log10(share, out=np.full_like(share, np.nan), where=share > 0)
    return tuple((-2.5 * logarithm + 0.0).tolist())


def _words(flags: int) -> tuple[str, ...]:
    return tuple((flag.name or "").lower().replace("_", " ") for flag in StarFlag if flags & flag)


def _known(value: Any) -> float | None:
    return float(value) if np.isfinite(value) else None
