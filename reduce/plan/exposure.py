"""Expected signal-to-noise of an exposure, and the exposure for a wanted one, with a telescope that is known."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from reduce.measure.noise import exposure_for_snr, scintillation, snr
from reduce.plan.moonlight import sky_airmass

APERTURE_FWHM = 1.0
"""Radius that the planned photometry is summed in."""
SEEING_POWER = 0.6
"""FWHM grows with airmass to this power (turbulence theory)."""
PEAK_MARGIN = 0.7
"""A planned peak stays below this part of saturation."""
READ_NOISE_SHARE = 0.1
"""Of the variance, which frames may be split up to."""
LEAST_S = 20.0
"""Shorter frames hold too few well measured comparison stars, and scintillate (common practice)."""
SPLIT_FRAMES = 3
"""Frames that a median needs against cosmic rays (common practice)."""


@dataclass(frozen=True, slots=True)
class Conditions:
    """What stands between star and telescope."""

    airmass: float
    altitude_deg: float
    moonlight_nl: float = 0.0
    """In V (`moonlight_nl`)."""
    fwhm_arcsec: float | None = None
    """As seen; None: the usual seeing at this airmass."""


@dataclass(frozen=True, slots=True)
class BandNoise:
    """One band of the telescope."""

    zero_point: float
    """Magnitude of 1 e-/s above the atmosphere."""
    extinction: float
    dark_sky: float
    """Without the Moon, through one airmass of it, e-/s/arcsec²."""
    moon_sky: float
    """e-/s/arcsec² for one nanolambert of moonlight in V."""
    err_night_mag: float
    """Usual error that the points of a night share."""
    usual_exposure_s: float
    n_frames: int
    actual_to_expected: float = 1.0
    """Error of the target's measured points over what this model expects of them; what the host adds is in it."""


@dataclass(frozen=True, slots=True)
class TelescopeNoise:
    """Everything that exposures are planned with; `telescope.telescope_noise` measures it."""

    bands: Mapping[str, BandNoise]
    scale_arcsec: float
    fwhm_arcsec: float
    """Usual seeing at the zenith."""
    read_noise_e: float
    dark_e_s_px: float
    saturation_e: float
    aperture_m: float | None
    height_m: float
    scintillation_coefficient: float

    def seeing(self, where: Conditions) -> float:
        """FWHM as seen, arcsec."""
        if where.fwhm_arcsec is not None:
            return where.fwhm_arcsec
        return float(self.fwhm_arcsec * where.airmass**SEEING_POWER)

    def rates(self, band: str, mag: float, where: Conditions) -> tuple[float, float, float]:
        """Electrons per second of the star in the aperture, of the sky per pixel, and the aperture's pixels."""
        one = self.bands[band]
        caught = 1.0 - 2.0 ** (-4.0 * APERTURE_FWHM**2)
        star = float(caught * 10.0 ** (-0.4 * (mag - one.zero_point + one.extinction * where.airmass)))
        sky = one.dark_sky * sky_airmass(90.0 - where.altitude_deg) + one.moon_sky * where.moonlight_nl
        area = math.pi * (APERTURE_FWHM * self.seeing(where) / self.scale_arcsec) ** 2
        return star, sky * self.scale_arcsec**2, max(area, 1.0)

    def snr(self, band: str, mag: float, exposure_s: float, where: Conditions, n: int = 1) -> float:
        """Expected signal-to-noise of ``n`` frames together: photons, dark, read-out, scintillation."""
        star, sky, area = self.rates(band, mag, where)
        one = snr(
            star * exposure_s, sky * exposure_s, self.dark_e_s_px * exposure_s, self.read_noise_e, area, 20.0 * area,
            median_sky=True,
        )  # fmt: skip
        relative = math.hypot(self.bands[band].actual_to_expected / one, self._scintillation(exposure_s, where))
        return math.sqrt(n) / relative

    def _scintillation(self, exposure_s: float, where: Conditions) -> float:
        if self.aperture_m is None:
            return 0.0
        return scintillation(
            self.aperture_m, where.airmass, exposure_s, self.height_m, self.scintillation_coefficient
        )  # fmt: skip

    def exposure(self, band: str, mag: float, wanted_snr: float, where: Conditions) -> float:
        """Seconds in one frame that reach a signal-to-noise, without scintillation."""
        star, sky, area = self.rates(band, mag, where)
        wanted = wanted_snr * self.bands[band].actual_to_expected
        return exposure_for_snr(wanted, star, sky, self.dark_e_s_px, self.read_noise_e, area)

    def saturating_exposure(self, band: str, mag: float, where: Conditions) -> float:
        """Seconds after which a star's peak (a Gaussian's, well centred) reaches saturation."""
        star, sky, _ = self.rates(band, mag, where)
        sigma_px = self.seeing(where) / self.scale_arcsec / math.sqrt(8.0 * math.log(2.0))
        caught = 1.0 - 2.0 ** (-4.0 * APERTURE_FWHM**2)
        peak = star / caught * math.erf(0.5 / (math.sqrt(2.0) * sigma_px)) ** 2
        return float(self.saturation_e / (peak + sky))

    def longest_unsaturated(self, band: str, mag: float, where: Conditions) -> float:
        """Seconds of a frame that keep the star's peak well below saturation."""
        return PEAK_MARGIN * self.saturating_exposure(band, mag, where)

    def split(self, band: str, mag: float, total_s: float, where: Conditions, longest_s: float) -> tuple[int, float]:
        """Number and length of frames for a total exposure.

        As short as saturation and ``longest_s`` ask; three frames against cosmic rays as long as reading out more often
        adds less than a tenth to the variance and none is shorter than 20 s.
        """
        star, sky, area = self.rates(band, mag, where)
        longest = min(longest_s, self.longest_unsaturated(band, mag, where))
        n = max(1, math.ceil(total_s / longest - 1e-9))
        photons = (star + area * (sky + self.dark_e_s_px)) * total_s
        affordable = int(READ_NOISE_SHARE * photons / max(area * self.read_noise_e**2, 1e-9))
        n = max(n, min(SPLIT_FRAMES, affordable, int(total_s / LEAST_S)))
        return n, total_s / n
