"""The comparison stars and targets of one frame, found by position among everything that was measured."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.field.sequence import cross_match
from reduce.records import Floats, FrameInfo, HostLight, Measured, Quality, Sequence, StarFlag
from reduce.standard.struck import mark_struck

MATCH_RADIUS_ARCSEC = 2.0
MATCH_RADIUS_PX = 2.0
SPOILED = (
    StarFlag.SATURATED | StarFlag.BAD_PIXEL | StarFlag.EDGE | StarFlag.COSMIC_RAY | StarFlag.NO_CENTROID
    | StarFlag.NON_LINEAR | StarFlag.TRAIL | StarFlag.RESIDUAL_IMAGE
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
    """(n_stars, N_RADII + 1) instrumental magnitudes, of the PSF last; NaN where not measured, spoiled or too faint."""
    mag_err: Floats
    """(n_stars, N_RADII + 1) photon and sky noise with scintillation."""
    saturated: NDArray[np.bool_]
    """(n_stars,) seen, but too bright for this exposure."""
    target_names: tuple[str, ...]
    target_flux_e: Floats
    """(n_targets, N_RADII + 1)."""
    target_flux_err_e: Floats
    """(n_targets, N_RADII + 1) without scintillation."""
    target_flags: NDArray[np.uint32]
    """(n_targets, N_RADII + 1) StarFlag bits."""
    target_offset_fwhm: Floats = field(default_factory=lambda: np.zeros(0))
    """(n_targets,) how far the light lies from where the target was measured, as the PSF sees it."""
    target_host: tuple[HostLight | None, ...] = ()
    """How each target was freed of its host's light; None: as measured on the frame."""
    place: Floats = field(default_factory=lambda: np.zeros((0, 2)))
    """(n_stars, 2) offset from the frame's centre in half frames (of the longer side); NaN where not measured."""
    target_place: Floats = field(default_factory=lambda: np.zeros((0, 2)))
    """(n_targets, 2)."""
    rotation_deg: float = 0.0
    """Position angle of the frame's +y axis."""
    mirrored: bool = False

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
    info, quality, table = measured.info, measured.quality, mark_struck(measured.stars)
    if info is None or quality is None or info.band is None or info.mjd_mid is None or not info.exposure_s:
        raise ValueError(f"frame {measured.frame} is called measured but lacks band, time, exposure or quality")
    stars, targets = table[table["role"] == 0], table[table["role"] == 1]
    index = _match(measured, sequence, stars)
    seen = index >= 0
    chosen: NDArray[Any] = stars[index[seen]] if len(stars) else stars
    shape = (len(sequence), table["flux_e"].shape[1] + 1)
    mag, mag_err = np.full(shape, np.nan), np.full(shape, np.nan)
    saturated = np.zeros(len(sequence), bool)
    place = np.full((len(sequence), 2), np.nan)
    place[seen] = _place(chosen, info)
    if len(chosen):
        flux, flux_err, flags = _all_ways(chosen)
        good = np.isfinite(flux) & (flux_err > 0) & (flux > LEAST_SNR * flux_err) & (flags & int(SPOILED) == 0)
        positive = np.where(good, flux, 1.0)
        mag[seen] = np.where(good, -2.5 * np.log10(positive / info.exposure_s), np.nan)
        fraction = np.hypot(flux_err / positive, quality.scintillation)
        mag_err[seen] = np.where(good, np.maximum(2.5 / np.log(10) * fraction, LEAST_ERR_MAG), np.nan)
        saturated[seen] = (chosen["flags"] & int(StarFlag.SATURATED) != 0).any(axis=1)
    target_flux_e, target_flux_err_e, target_flags = _all_ways(targets)
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
        target_flux_e=target_flux_e,
        target_flux_err_e=target_flux_err_e,
        target_flags=target_flags,
        target_offset_fwhm=np.hypot(targets["psf_dx_px"], targets["psf_dy_px"]).astype(float) / quality.fwhm_px,
        target_host=tuple(_taken_off(measured.host_light.get(str(name))) for name in targets["target"]),
        place=place,
        target_place=_place(targets, info),
        rotation_deg=measured.solution.rotation_deg if measured.solution is not None else 0.0,
        mirrored=measured.solution is not None and measured.solution.mirrored,
    )


def _all_ways(rows: NDArray[Any]) -> tuple[Floats, Floats, NDArray[np.uint32]]:
    """Fluxes, errors and flags, each (n, N_RADII + 1): through every radius, then under the PSF."""
    measured = rows["psf_flux_err_e"] > 0
    psf = np.where(measured, rows["psf_flux_e"], np.nan)
    flux = np.column_stack([rows["flux_e"], psf]).astype(float)
    flux_err = np.column_stack([rows["flux_err_e"], np.where(measured, rows["psf_flux_err_e"], np.nan)]).astype(float)
    return flux, flux_err, np.column_stack([rows["flags"], rows["psf_flags"]]).astype(np.uint32)


def _place(rows: NDArray[Any], info: FrameInfo) -> Floats:
    """(n, 2) offsets from the frame's centre in half frames."""
    half = max(info.nx, info.ny) / 2.0
    offset = np.stack([rows["x_px"] - (info.nx - 1) / 2.0, rows["y_px"] - (info.ny - 1) / 2.0], axis=-1)
    return np.asarray(offset / half, dtype=float)


def _taken_off(light: HostLight | None) -> HostLight | None:
    return light if light is not None and light.taken_off else None


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
