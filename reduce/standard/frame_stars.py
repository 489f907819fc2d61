"""The comparison stars and targets of one frame, found by position among everything that was measured."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.field.sequence import cross_match
from reduce.records import Floats, Measured, Quality, Sequence, StarFlag

MATCH_RADIUS_ARCSEC = 2.0
MATCH_RADIUS_PX = 2.0
SPOILED = (
    StarFlag.SATURATED | StarFlag.BAD_PIXEL | StarFlag.EDGE | StarFlag.COSMIC_RAY | StarFlag.NO_CENTROID
    | StarFlag.NON_LINEAR
)  # fmt: skip
"""A comparison star with any of these inside the aperture says nothing about the zero point."""
LEAST_SNR = 10.0
"""Fainter comparison stars would bias a mean of magnitudes."""
LEAST_ERR_MAG = 1e-4
"""No star is measured better than this on one frame, however many photons it has (common practice)."""


@dataclass(frozen=True, slots=True)
class FrameStars:
    """One frame, reduced to what the standard system needs; star arrays follow the sequence's order."""

    frame: str
    band: str
    camera: str
    night: str
    mjd: float
    """UTC, mid-exposure."""
    exposure_s: float
    quality: Quality
    mag: Floats
    """(n_stars, N_RADII) instrumental magnitudes; NaN where not measured, spoiled or too faint."""
    mag_err: Floats
    """(n_stars, N_RADII) photon and sky noise with scintillation."""
    saturated: NDArray[np.bool_]
    """(n_stars,) seen, but too bright for this exposure."""
    target_names: tuple[str, ...]
    target_flux_e: Floats
    """(n_targets, N_RADII)."""
    target_flux_err_e: Floats
    """(n_targets, N_RADII) without scintillation."""
    target_flags: NDArray[np.uint32]
    """(n_targets, N_RADII) StarFlag bits."""

    @property
    def group(self) -> tuple[str, str]:
        """Camera and band: the frames that share a colour term."""
        return self.camera, self.band

    @property
    def zp_group(self) -> str:
        """camera/band/night: the frames whose points share an error."""
        return f"{self.camera}/{self.band}/{self.night}"


def frame_stars(measured: Measured, sequence: Sequence, night: str) -> FrameStars:
    """Pick the sequence's stars and the targets out of one measured frame.

    Parameters
    ----------
    measured
        A frame whose outcome is "measured".
    sequence
        Comparison stars; each takes the nearest measured star within 2″ or 2 px, whichever is wider.
    night
        Date of the evening the frame belongs to.
    """
    info, quality, table = measured.info, measured.quality, measured.stars
    if info is None or quality is None or info.band is None or info.mjd_mid is None or not info.exposure_s:
        raise ValueError(f"frame {measured.frame} is called measured but lacks band, time, exposure or quality")
    stars, targets = table[table["role"] == 0], table[table["role"] == 1]
    index = _match(measured, sequence, stars)
    seen = index >= 0
    chosen: NDArray[Any] = stars[index[seen]] if len(stars) else stars
    shape = (len(sequence), table["flux_e"].shape[1])
    mag, mag_err = np.full(shape, np.nan), np.full(shape, np.nan)
    saturated = np.zeros(len(sequence), bool)
    if len(chosen):
        flux, flux_err = chosen["flux_e"], chosen["flux_err_e"]
        good = (
            np.isfinite(flux) & (flux_err > 0) & (flux > LEAST_SNR * flux_err) & (chosen["flags"] & int(SPOILED) == 0)
        )
        positive = np.where(good, flux, 1.0)
        mag[seen] = np.where(good, -2.5 * np.log10(positive / info.exposure_s), np.nan)
        fraction = np.hypot(flux_err / positive, quality.scintillation)
        mag_err[seen] = np.where(good, np.maximum(2.5 / np.log(10) * fraction, LEAST_ERR_MAG), np.nan)
        saturated[seen] = (chosen["flags"] & int(StarFlag.SATURATED) != 0).any(axis=1)
    return FrameStars(
        frame=measured.frame,
        band=info.band,
        camera=info.camera,
        night=night,
        mjd=info.mjd_mid,
        exposure_s=info.exposure_s,
        quality=quality,
        mag=mag,
        mag_err=mag_err,
        saturated=saturated,
        target_names=tuple(str(name) for name in targets["target"]),
        target_flux_e=targets["flux_e"].astype(float),
        target_flux_err_e=targets["flux_err_e"].astype(float),
        target_flags=targets["flags"].copy(),
    )


def _match(measured: Measured, sequence: Sequence, stars: NDArray[Any]) -> NDArray[np.int64]:
    """Row of ``stars`` for every star of the sequence, or -1; a measured star serves only its nearest."""
    if len(stars) == 0 or len(sequence) == 0:
        return np.full(len(sequence), -1)
    scale = measured.solution.scale_arcsec if measured.solution is not None else 0.0
    radius = max(MATCH_RADIUS_ARCSEC, MATCH_RADIUS_PX * scale)
    there = cross_match(sequence.ra_deg, sequence.dec_deg, stars["ra_deg"], stars["dec_deg"], radius)
    back = cross_match(stars["ra_deg"], stars["dec_deg"], sequence.ra_deg, sequence.dec_deg, radius)
    mutual = (there >= 0) & (back[there] == np.arange(len(sequence)))
    return np.where(mutual, there, -1)
