"""What the telescope can do, measured from its own frames: zero points, extinction, sky, seeing, read-out noise."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from reduce.almanac.airmass import altitude_azimuth, pickering
from reduce.almanac.sky import moon, moon_phase
from reduce.plan.exposure import SEEING_POWER, BandNoise, Conditions, TelescopeNoise
from reduce.plan.moonlight import moonlight_nl, sky_airmass, v_mag_arcsec2
from reduce.records import (
    BANDS,
    LADDER_FWHM,
    FieldSolution,
    Floats,
    FrameInfo,
    FrameZeroPoint,
    Measured,
    Quality,
    Solution,
)
from reduce.settings import Settings

EXTINCTION = {"B": 0.30, "V": 0.20, "R": 0.14, "I": 0.08, "g": 0.24, "r": 0.13, "i": 0.09}
"""mag per airmass where the frames cannot tell; typical of a low site (from memory)."""
LEAST_AIRMASS_RANGE = 0.5
"""Of the frames of a band, from which on their zero points give the extinction."""
MOON_COLOUR = {"B": -0.67, "V": 0.0, "R": 0.23, "I": -0.23, "g": -0.4, "r": 0.15, "i": 0.0}
"""Moonlit sky in the band minus in V, mag, of the full Moon's sky (Walker 1987; from memory, g r i estimated)."""
DARK_SKY = {"B": 22.7, "V": 21.8, "R": 20.9, "I": 19.9, "g": 22.2, "r": 21.2, "i": 20.3}
"""mag/arcsec² where no frame tells (CTIO, Walker 1987; from memory, g r i estimated)."""
PRIOR_WEIGHT = 0.3
"""The moonlight law counts as a frame of the band under the brightest Moon with an error larger by 1 / this."""
USUAL_READ_NOISE_E, USUAL_SATURATION_ADU = 10.0, 65535.0
"""Where neither headers nor settings tell (common practice)."""
DARKEST_SUN_DEG = -15.0
"""Frames of the sky's brightness are taken with the Sun lower than this, as long as there are any."""
ZENITH = Conditions(1.0, 90.0)


@dataclass(frozen=True, slots=True)
class _Frame:
    """A kept frame with a zero point, and what stood between it and the stars."""

    zero_point: float
    """For all the light of a star."""
    band: str
    info: FrameInfo
    quality: Quality
    field: FieldSolution
    where: Conditions

    @property
    def fwhm_arcsec(self) -> float:
        return self.quality.fwhm_px * self.field.scale_arcsec

    @property
    def sky_rate(self) -> float:
        """e-/s/arcsec²."""
        return self.quality.sky_e_px / self.quality.exposure_s / self.field.scale_arcsec**2


def telescope_noise(rows: Sequence[Measured], solution: Solution, settings: Settings) -> TelescopeNoise | None:
    """The noise model that the measured frames give; None as long as no frame has a zero point.

    Zero point and extinction from the frames' zero points against airmass, sky from their sky levels with a part that
    is always there and one that goes with the moonlight law, seeing and read-out noise as the medians of the frames.
    """
    frames = _frames(rows, solution, settings)
    if not frames:
        return None
    seen = list(frames.values())
    camera, telescope = settings.camera, settings.telescope
    infos = [one.info for one in seen]
    gain = _median([info.gain_e_per_adu for info in infos], camera.gain_e_per_adu or 1.0)
    saturation = _median([info.saturation_adu for info in infos], camera.saturation_adu or USUAL_SATURATION_ADU)
    noise = TelescopeNoise(
        bands={
            band: _band_noise(band, mine, solution)
            for band in BANDS
            if (mine := [one for one in seen if one.band == band])
        },
        scale_arcsec=float(np.median([one.field.scale_arcsec for one in seen])),
        fwhm_arcsec=float(np.median([one.fwhm_arcsec / one.where.airmass**SEEING_POWER for one in seen])),
        read_noise_e=_median([info.read_noise_e for info in infos], camera.read_noise_e or USUAL_READ_NOISE_E),
        dark_e_s_px=camera.dark_e_per_s or 0.0,
        saturation_e=gain * min(saturation, camera.linear_limit_adu or math.inf),
        aperture_m=telescope.aperture_m,
        height_m=settings.site.height_m if settings.site is not None else 0.0,
        scintillation_coefficient=telescope.scintillation_coefficient,
    )
    return replace(noise, bands={band: _checked(band, noise, frames, solution) for band in noise.bands})


def conditions(mjd: float, ra_deg: float, dec_deg: float, settings: Settings) -> Conditions:
    """What a frame of a place in the sky (ICRS) meets at a time; the zenith of a dark night without a site."""
    if settings.site is None:
        return ZENITH
    altitude, _ = altitude_azimuth(mjd, ra_deg, dec_deg, settings.site)
    altitude = max(altitude, 1.0)
    above = moon(mjd, ra_deg, dec_deg, settings.site)
    light = moonlight_nl(moon_phase(mjd)[0], above.separation_deg, above.altitude_deg, altitude)
    return Conditions(pickering(altitude), altitude, light)


def _frames(rows: Sequence[Measured], solution: Solution, settings: Settings) -> dict[str, _Frame]:
    found = {}
    for row in rows:
        zero_point, verdict = solution.zero_points.get(row.frame), solution.verdicts.get(row.frame)
        if zero_point is None or (verdict is not None and verdict.state != "kept"):
            continue
        if row.info is None or row.info.mjd_mid is None or row.quality is None or row.solution is None:
            continue
        where = conditions(row.info.mjd_mid, *row.solution.crval_deg, settings)
        mag = _of_all_light(zero_point, row)
        found[row.frame] = _Frame(mag, zero_point.band, row.info, row.quality, row.solution, where)
    return found


def _of_all_light(zero_point: FrameZeroPoint, row: Measured) -> float:
    """Zero point for all the light of a star, from that of its aperture (0: the PSF, which has it all)."""
    if zero_point.aperture_fwhm not in LADDER_FWHM:
        return zero_point.zp_mag
    lost = float(row.growth_mag[LADDER_FWHM.index(zero_point.aperture_fwhm)])
    return zero_point.zp_mag - (lost if math.isfinite(lost) else 0.0)


def _median(values: Sequence[float | None], otherwise: float) -> float:
    known = [value for value in values if value is not None]
    return float(np.median(known)) if known else otherwise


def _band_noise(band: str, frames: Sequence[_Frame], solution: Solution) -> BandNoise:
    airmass = np.array([one.where.airmass for one in frames])
    mag = np.array([one.zero_point for one in frames])
    extinction = EXTINCTION[band]
    if np.ptp(airmass) > LEAST_AIRMASS_RANGE and len(frames) > 3:
        extinction = float(np.clip(-np.polyfit(airmass, mag, 1)[0], 0.0, 2.0 * extinction + 0.1))
    zero_point = float(np.median(mag + extinction * airmass))
    dark, moonlit = _sky(band, zero_point, frames)
    nights = [point.err_night for point in solution.night_points if point.band == band]
    return BandNoise(
        zero_point=zero_point,
        extinction=extinction,
        dark_sky=dark,
        moon_sky=moonlit,
        err_night_mag=_median(nights, 0.01),
        usual_exposure_s=float(np.median([one.quality.exposure_s for one in frames])),
        n_frames=len(frames),
    )


def _sky(band: str, zero_point: float, frames: Sequence[_Frame]) -> tuple[float, float]:
    """Least squares of the sky's rate on the dark part and the moonlight, the law for V with the colour of moonlight as
    prior; both parts relative to what is expected, neither below a tenth of it.
    """
    from scipy.optimize import nnls

    expected_dark = 10.0 ** (-0.4 * (DARK_SKY[band] - zero_point))
    # one nanolambert of V, in the band
    expected_moon = 10.0 ** (-0.4 * (v_mag_arcsec2(1.0) + MOON_COLOUR[band] - zero_point))
    low = [one for one in frames if (one.quality.sun_altitude_deg or -90.0) < DARKEST_SUN_DEG] or frames
    rate = np.array([max(one.sky_rate, 1e-9) for one in low])
    dark = np.array([expected_dark * sky_airmass(90.0 - one.where.altitude_deg) for one in low])
    moonlit = np.array([expected_moon * one.where.moonlight_nl for one in low])
    prior = PRIOR_WEIGHT * (float((moonlit / rate).max()) or 1.0)
    design: Floats = np.vstack([np.column_stack([dark, moonlit]) / rate[:, None], [0.0, prior]])
    parts, _ = nnls(design, np.append(np.ones(len(low)), prior))
    return max(float(parts[0]), 0.1) * expected_dark, max(float(parts[1]), 0.1) * expected_moon


def _checked(band: str, noise: TelescopeNoise, frames: dict[str, _Frame], solution: Solution) -> BandNoise:
    """The band with the ratio of the errors that its targets' points really have to what the model expects."""
    ratios = []
    for point in solution.frame_points:
        one = frames.get(point.file or "")
        if one is None or point.band != band or point.mag is None or point.state != "kept" or point.flux <= 0:
            continue
        where = replace(one.where, fwhm_arcsec=one.fwhm_arcsec)
        expected = noise.snr(band, point.mag, one.quality.exposure_s, where)
        ratios.append(expected * point.flux_err / point.flux)
    known = noise.bands[band]
    return replace(known, actual_to_expected=float(np.clip(np.median(ratios), 0.7, 3.0))) if ratios else known
