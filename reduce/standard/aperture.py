"""One aperture radius for all frames of a camera and band, in units of each frame's FWHM.

Targets and comparison stars of a frame are measured through one radius: no aperture correction is needed.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reduce.records import LADDER_FWHM, Floats
from reduce.standard.frame_stars import FrameStars

DEFAULT_FWHM = 1.5
"""Where no target was measured (common practice)."""
POSITION_ERR_FWHM = 0.1
"""How far a target may be from where it is said to be; it is measured there, stars at their own centroid."""


def position_loss_mag(radius_fwhm: float) -> float:
    """Magnitudes that a Gaussian star loses when its aperture is off by `POSITION_ERR_FWHM`.

    Second-order expansion of the enclosed flux: ``dF/F = d²/(2σ²) · x e^-x / (1 - e^-x)``, ``x = r²/(2σ²)``.
    """
    per_fwhm2 = 4.0 * np.log(2.0)  # 1/(2σ²) in units of FWHM
    x = per_fwhm2 * radius_fwhm**2
    return float(2.5 / np.log(10) * per_fwhm2 * POSITION_ERR_FWHM**2 * x * np.exp(-x) / (1 - np.exp(-x)))


def nearest_radius(radius_fwhm: float) -> int:
    """Index into LADDER_FWHM of the radius closest to what was asked for."""
    return int(np.argmin(np.abs(np.array(LADDER_FWHM) - radius_fwhm)))


def best_radius(frames: Sequence[FrameStars]) -> int:
    """Index into LADDER_FWHM of the radius with the smallest typical error of the targets.

    The error adds up the target's noise, the photon error of the zero point through the same radius and the
    loss from an inexact position; its median over frames and targets is made as small as possible.
    """
    rows: list[Floats] = [np.zeros((0, len(LADDER_FWHM)))]
    loss = np.array([position_loss_mag(radius) for radius in LADDER_FWHM])
    n = len(LADDER_FWHM)
    for frame in frames:
        flux, flux_err = frame.target_flux_e[:, :n], frame.target_flux_err_e[:, :n]
        usable = (flux > 0) & (flux_err > 0)
        err = np.where(usable, 2.5 / np.log(10) * flux_err / np.where(usable, flux, 1.0), np.nan)
        rows.append(np.sqrt(err**2 + _zero_point_variance(frame)[:n] + loss**2))
    scores = np.concatenate(rows)
    scores = scores[np.isfinite(scores).all(axis=1)]
    if len(scores) == 0:
        return nearest_radius(DEFAULT_FWHM)
    return int(np.argmin(np.median(scores, axis=0)))


def _zero_point_variance(frame: FrameStars) -> Floats:
    """(N_RADII,) photon variance of the frame's zero point, from stars measured through every radius."""
    whole = np.isfinite(frame.mag_err).all(axis=1)
    if not whole.any():
        return np.zeros(frame.mag_err.shape[1])
    variance: Floats = 1.0 / (frame.mag_err[whole] ** -2.0).sum(axis=0)
    return variance
