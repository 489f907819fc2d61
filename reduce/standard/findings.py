"""What is found wrong with the frames of one camera and band: first from their images, then from their zero points."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from reduce.records import LADDER_FWHM, Floats, StarFlag
from reduce.standard import verdict as judge
from reduce.standard.frame_stars import FrameStars
from reduce.standard.position import Planes
from reduce.standard.transparency import dew, dimming, nightly_dimming
from reduce.standard.verdict import Finding
from reduce.standard.zeropoint import JointSolution

INNER, OUTER = LADDER_FWHM.index(0.6), LADDER_FWHM.index(1.0)


def look_at_images(frames: Sequence[FrameStars], radius: int, slips: Mapping[str, str]) -> list[list[Finding]]:
    """Findings of each frame that need no zero point.

    Parameters
    ----------
    frames
        Of one camera and band.
    radius
        Index of the way of measuring that is used.
    slips
        Frame → sentence, from `wheel_slips`.
    """
    qualities = [frame.quality for frame in frames]
    fwhm_px, sky_e_s = judge.usual_fwhm_px(qualities), judge.usual_sky_e_s(qualities)
    looks = []
    for frame in frames:
        found = judge.image_findings(frame.quality, fwhm_px, sky_e_s, core_ratio(frame.mag))
        found += judge.crossed_findings(_crossed(frame, radius), len(frame.target_names))
        if frame.frame in slips:
            found.append(("dropped", slips[frame.frame]))
        looks.append(found)
    return looks


def core_ratio(mag: Floats) -> float:
    """Median over the stars of surface brightness inside 0.6 FWHM over that from there to 1 FWHM; NaN with few stars.

    Parameters
    ----------
    mag
        (n, at least len(LADDER_FWHM)) magnitudes through the ladder of radii.
    """
    within = mag[:, INNER] - mag[:, OUTER]
    within = within[np.isfinite(within)]
    if len(within) < judge.LEAST_STARS:
        return float("nan")
    share = float(10 ** (-0.4 * np.median(within)))
    inner, outer = LADDER_FWHM[INNER] ** 2, LADDER_FWHM[OUTER] ** 2
    return share / inner / max((1.0 - share) / (outer - inner), 1e-12)


def _crossed(frame: FrameStars, radius: int) -> list[str]:
    """Targets with a trail in their aperture."""
    hit = (frame.target_flags[:, radius] & int(StarFlag.TRAIL)) != 0
    return [name for name, crossed in zip(frame.target_names, hit, strict=True) if crossed]


def look_at_zero_points(
    frames: Sequence[FrameStars],
    band: str,
    joint: JointSolution,
    expected_rms_mag: Floats,
    planes: Planes,
    speaks: NDArray[np.bool_],
) -> list[list[Finding]]:
    """Findings of each frame that need its zero point.

    Parameters
    ----------
    frames, band
        Of one camera and band.
    joint
        Their solution.
    expected_rms_mag
        (F,) star-to-star scatter that photons, stars and catalogue allow.
    planes
        What was taken off.
    speaks
        (F,) frames whose images are in order: of the others' zero points nothing is said.
    """
    airmass = np.array([np.nan if f.quality.airmass is None else f.quality.airmass for f in frames], dtype=float)
    mjd = np.array([frame.mjd for frame in frames])
    night = np.unique([frame.night for frame in frames], return_inverse=True)[1]
    dim = dimming(joint.zp_mag, airmass, band, mjd, speaks)
    dim_tonight = nightly_dimming(joint.zp_mag, airmass, band, night, speaks)
    fwhm_px = np.array([frame.quality.fwhm_px for frame in frames])
    sky_e_s = np.array([frame.quality.sky_e_px / frame.quality.exposure_s for frame in frames])
    dewed = np.zeros(len(frames))
    for one in np.unique(night):
        mine = night == one
        dewed[mine] = dew(dim_tonight[mine], mjd[mine], fwhm_px[mine], airmass[mine], sky_e_s[mine])
    looks = []
    for k, frame in enumerate(frames):
        trailed = frame.quality.elongation > judge.TRAILED
        found = judge.star_findings(int(joint.n_stars[k]), band)
        looks.append(found)
        if not speaks[k]:
            continue
        found += judge.cloud_findings(dim[k], dim_tonight[k], dewed[k], planes.of_frame_mag[k])
        found += judge.scatter_findings(joint.rms_mag[k], expected_rms_mag[k], joint.frame_scatter_mag[k], trailed)
    return looks
