"""One way of measuring for all frames of a camera and band: an aperture in units of each frame's FWHM, or the PSF.

Targets and comparison stars of a frame are measured the same way: no aperture correction is needed. Where radii in FWHM
are written down, 0 stands for the sum under the point-spread function.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reduce.records import LADDER_FWHM, PSF_COLUMN, Floats, StarFlag
from reduce.standard.frame_stars import SPOILED, FrameStars

DEFAULT_FWHM = 1.5
"""Where no target was measured (common practice)."""
POSITION_ERR_FWHM = 0.1
"""How far a target may be from where it is said to be; it is measured there, stars at their own centroid."""
POSITION_SNR, POSITION_FRAMES = 20.0, 3
"""So many frames on which a target is so bright tell how far it really is."""
POSITION_RANGE_FWHM = (0.02, 0.3)
FEWEST = 5
"""Frames of a star, and stars of a frame, that tell what stars scatter."""
PSF = 0.0
"""The radius that stands for the PSF."""
MOST_WITHOUT_PSF = 0.05
"""Share of the frames that may have too few stars for a point-spread function; they give no magnitude then."""


def position_err_fwhm(frames: Sequence[FrameStars]) -> float:
    """How far the targets lie from where they are measured, in FWHM, by the frames on which they are bright.

    The median over the frames of the offset that the PSF found; the largest of all targets. `POSITION_ERR_FWHM` for
    targets that are not bright on three frames.
    """
    found: dict[str, list[float]] = {}
    for frame in frames:
        flux, flux_err = frame.target_flux_e[:, PSF_COLUMN], frame.target_flux_err_e[:, PSF_COLUMN]
        bright = (frame.target_flags[:, PSF_COLUMN] & int(SPOILED & ~StarFlag.NO_CENTROID) == 0) & (flux_err > 0)
        bright &= flux > POSITION_SNR * flux_err
        for row, name in enumerate(frame.target_names):
            offsets = found.setdefault(name, [])
            if bright[row]:
                offsets.append(float(frame.target_offset_fwhm[row]))
    known = [
        float(np.median(offsets)) if len(offsets) >= POSITION_FRAMES else POSITION_ERR_FWHM
        for offsets in found.values()
    ]
    return float(np.clip(max(known, default=POSITION_ERR_FWHM), *POSITION_RANGE_FWHM))


def position_loss_mag(radius_fwhm: float, err_fwhm: float = POSITION_ERR_FWHM) -> float:
    """Magnitudes that a Gaussian star loses when it is measured ``err_fwhm`` beside its place.

    Second-order expansion of the enclosed flux: ``dF/F = d²/(2σ²) · x e^-x / (1 - e^-x)``, ``x = r²/(2σ²)``. Under the
    PSF (radius 0), of a star fainter than its sky, ``dF/F = d²/(4σ²)``: half the limit of a small aperture.
    """
    per_fwhm2 = 4.0 * np.log(2.0)  # 1/(2σ²) in units of FWHM
    if radius_fwhm == PSF:
        return float(2.5 / np.log(10) * per_fwhm2 * err_fwhm**2 / 2.0)
    x = per_fwhm2 * radius_fwhm**2
    return float(2.5 / np.log(10) * per_fwhm2 * err_fwhm**2 * x * np.exp(-x) / (1 - np.exp(-x)))


def nearest_radius(radius_fwhm: float) -> int:
    """Index into LADDER_FWHM of the radius closest to what was asked for; PSF_COLUMN for 0."""
    if radius_fwhm == PSF:
        return PSF_COLUMN
    return int(np.argmin(np.abs(np.array(LADDER_FWHM) - radius_fwhm)))


def radius_fwhm(radius: int) -> float:
    """The radius in FWHM that an index stands for; 0 for PSF_COLUMN."""
    return PSF if radius == PSF_COLUMN else LADDER_FWHM[radius]


def best_radius(frames: Sequence[FrameStars]) -> int:
    """Index into LADDER_FWHM of the radius, or PSF_COLUMN, with the smallest typical error of the targets.

    The error adds up the target's noise, the photon error of the zero point measured the same way, what single stars
    scatter beyond their photons (coarse pixels under a small aperture) and the loss from an inexact position; its
    median over frames and targets is made as small as possible. The PSF may be chosen where all but one in twenty
    frames have one.

    A target whose host was taken off is measured under the PSF: what may be left of the host was found for that sum,
    its pixels are rejected against it, and the scatter of lone stars says nothing of either.
    """
    if any(host is not None and host.method != "annulus" for frame in frames for host in frame.target_host):
        return PSF_COLUMN
    ways: list[int] = [*range(len(LADDER_FWHM)), PSF_COLUMN]
    err_fwhm = position_err_fwhm(frames)
    loss = np.array([position_loss_mag(radius_fwhm(way), err_fwhm) for way in ways])
    scatter = _scatter_variance(frames)
    rows: list[Floats] = [np.zeros((0, len(ways)))]
    for frame in frames:
        flux, flux_err = frame.target_flux_e[:, ways], frame.target_flux_err_e[:, ways]
        usable = (flux > 0) & (flux_err > 0)
        err = np.where(usable, 2.5 / np.log(10) * flux_err / np.where(usable, flux, 1.0), np.nan)
        rows.append(np.sqrt(err**2 + _zero_point_variance(frame)[ways] + loss**2 + scatter[ways]))
    scores = np.concatenate(rows)
    seen = [np.isfinite(frame.mag) for frame in frames]
    without = sum(bool(some.any() and not some[:, PSF_COLUMN].any()) for some in seen)
    if without > MOST_WITHOUT_PSF * len(frames):
        scores = scores[:, :-1]
    scores = scores[np.isfinite(scores).all(axis=1)]
    if len(scores) == 0:
        return nearest_radius(DEFAULT_FWHM)
    return ways[int(np.argmin(np.median(scores, axis=0)))]


def _scatter_variance(frames: Sequence[FrameStars]) -> Floats:
    """(N_RADII + 1,) what a star scatters from frame to frame beyond its photons, by the brighter half; 0 with few."""
    if len(frames) < FEWEST:
        return np.zeros(PSF_COLUMN + 1)
    mag, err = np.array([frame.mag for frame in frames]), np.array([frame.mag_err for frame in frames])
    usual = nearest_radius(DEFAULT_FWHM)
    often = np.isfinite(mag[:, :, usual]).sum(axis=0) >= FEWEST
    mag, err = mag[:, often], err[:, often]
    if not often.any():
        return np.zeros(PSF_COLUMN + 1)
    typical = np.nanmedian(err[:, :, usual], axis=0)
    bright = typical <= np.median(typical)
    mag, err = mag[:, bright], err[:, bright]
    found = np.zeros(mag.shape[2])
    for way in range(mag.shape[2]):
        one, photons = mag[:, :, way], err[:, :, way]
        shots = np.isfinite(one).sum(axis=1) >= FEWEST
        one, photons = one[shots], photons[shots]
        seen = np.isfinite(one).sum(axis=0) >= FEWEST
        one, photons = one[:, seen], photons[:, seen]
        shots = np.isfinite(one).any(axis=1)
        one, photons = one[shots], photons[shots]
        if min(one.shape) < FEWEST:
            continue
        for _ in range(2):
            one = one - np.nanmedian(one, axis=0)
            one = one - np.nanmedian(one, axis=1)[:, None]
        found[way] = (1.4826 * np.nanmedian(np.abs(one))) ** 2 - np.nanmedian(photons**2)
    return np.maximum(found, 0.0)


def _zero_point_variance(frame: FrameStars) -> Floats:
    """(N_RADII + 1,) photon variance of the frame's zero point, from stars measured in every way that any star was."""
    known = np.isfinite(frame.mag_err)
    whole = known[:, known.any(axis=0)].all(axis=1) & known.any(axis=1)
    if not whole.any():
        return np.zeros(frame.mag_err.shape[1])
    weight: Floats = (frame.mag_err[whole] ** -2.0).sum(axis=0)
    return 1.0 / weight
