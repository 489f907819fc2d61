"""One light frame: what of the sky falls on the detector."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from demo_frames.atmosphere import airmass, altitude_deg, scintillation, sky_mag
from demo_frames.detector import Detector, Raw
from demo_frames.optics import Pointing, add_galaxy, add_star, add_streak
from demo_frames.scenario import Scenario
from demo_frames.schedule import Exposure
from demo_frames.star_field import StarField
from demo_frames.supernova import Supernova
from reduce.records import COLOUR_OF_BAND, Floats

TRAIL_STEPS = 40
CLOUD_CONTRAST = 0.25
CLOUD_WAVES_PX = (310.0, 430.0)


@dataclass(frozen=True, slots=True)
class Conditions:
    """State of sky and telescope during one exposure."""

    airmass: float
    zero_point: float
    fwhm_px: float
    pointing: Pointing
    dimming_mag: float
    """Cloud beyond the zero point's thin haze; already in ``zero_point``."""


@dataclass(frozen=True, slots=True)
class Scene:
    """What stands still during the campaign."""

    scenario: Scenario
    stars: StarField
    other_stars: StarField
    supernova: Supernova
    detector: Detector
    night_zero_point: Floats

    def target_mags(self, exposure: Exposure) -> dict[str, float]:
        """True standard magnitudes of the supernova at mid-exposure."""
        return {band: self.supernova.mag(band, exposure.mjd_mid, exposure.night) for band in self.scenario.bands}


def colour(band: str, mags: dict[str, float]) -> float:
    """Colour index that the band's colour term multiplies."""
    blue, red = COLOUR_OF_BAND[band]
    return mags[blue] - mags[red]


def draw_conditions(scene: Scene, exposure: Exposure, rng: np.random.Generator) -> Conditions:
    """Airmass from the clock; haze, seeing and dither by chance."""
    scenario, band = scene.scenario, scene.scenario.bands[exposure.filter_in_beam]
    night, target = scenario.nights[exposure.night], scenario.supernova
    x = airmass(altitude_deg(exposure.mjd_mid, target.ra_deg, target.dec_deg, scenario.site))
    dimming = exposure.fault.dimming_mag if exposure.fault else 0.0
    age_d = exposure.mjd_mid - scenario.nights[0].start_mjd
    zero_point = band.zero_point - band.first_order * x - dimming
    zero_point += float(scene.night_zero_point[exposure.night]) - scenario.sky.mirror_dimming_per_day * age_d
    zero_point += rng.normal(0.0, scenario.sky.frame_transparency_rms)
    seeing = night.seeing_arcsec * x**0.6 / 1.1 * (1.0 + rng.normal(0.0, scenario.sky.seeing_jitter))
    east, north = rng.uniform(-scenario.sky.dither_arcsec, scenario.sky.dither_arcsec, 2) / 3600.0
    camera = scenario.camera
    pointing = Pointing(
        target.ra_deg + east / np.cos(np.radians(target.dec_deg)),
        target.dec_deg + north,
        night.rotation_deg,
        camera.scale_arcsec,
        (camera.nx - 1) / 2.0,
        (camera.ny - 1) / 2.0,
    )
    return Conditions(x, zero_point, max(seeing, 1.8) / camera.scale_arcsec, pointing, dimming)


def _rate_e(scene: Scene, exposure: Exposure, now: Conditions, mags: dict[str, Floats]) -> Floats:
    """Expected electrons of the whole exposure for stars of these standard magnitudes."""
    name = exposure.filter_in_beam
    band = scene.scenario.bands[name]
    blue, red = COLOUR_OF_BAND[name]
    slope = band.colour_term - band.second_order * now.airmass
    instrumental = mags[name] - now.zero_point - slope * (mags[blue] - mags[red])
    return exposure.exposure_s * 10.0 ** (-0.4 * instrumental)


def _cloud_mag(now: Conditions, x: Floats, y: Floats) -> Floats:
    """How much more than the average the cloud dims at a pixel."""
    wave = np.sin(2.0 * np.pi * (x / CLOUD_WAVES_PX[0] + y / CLOUD_WAVES_PX[1]))
    return now.dimming_mag * CLOUD_CONTRAST * wave


def render_light(scene: Scene, exposure: Exposure, now: Conditions, rng: np.random.Generator) -> Floats:
    """Expected electrons on a perfect detector, (ny, nx): sky, stars, supernova, host."""
    scenario, name = scene.scenario, exposure.filter_in_beam
    camera, band = scenario.camera, scenario.bands[name]
    fault = exposure.fault.name if exposure.fault else ""
    clear = replace(now, zero_point=now.zero_point + now.dimming_mag)
    sky = sky_mag(exposure.mjd_mid, band) - 2.5 * np.log10(camera.scale_arcsec**2)
    # The sky's colour and extinction are taken as part of its brightness; a cloud does not darken it.
    sky_e = exposure.exposure_s * 10.0 ** (-0.4 * (sky - clear.zero_point))
    image = np.full((camera.ny, camera.nx), sky_e)

    stars = scene.other_stars if fault == "another field" else scene.stars
    ra, dec, mags = stars.ra_deg, stars.dec_deg, stars.mag
    if fault != "another field":
        target = scene.target_mags(exposure)
        ra, dec = np.append(ra, scenario.supernova.ra_deg), np.append(dec, scenario.supernova.dec_deg)
        mags = {key: np.append(mags[key], target[key]) for key in mags}
        add_host(image, scene, exposure, now)
    x, y = now.pointing.to_pixels(ra, dec)
    flux = _rate_e(scene, exposure, now, mags) * 10.0 ** (-0.4 * _cloud_mag(now, x, y))
    twinkle = scintillation(scenario.telescope, scenario.site, now.airmass, exposure.exposure_s)
    flux *= 1.0 + rng.normal(0.0, twinkle, len(flux))
    trail_px = (exposure.fault.trail_arcsec if exposure.fault else 0.0) / camera.scale_arcsec
    steps = (np.arange(TRAIL_STEPS) + 0.5) / TRAIL_STEPS - 0.5 if trail_px else np.zeros(1)
    for star_x, star_y, star_flux in zip(x, y, flux, strict=True):
        for step in steps:
            add_star(image, star_x + step * trail_px, star_y, star_flux / len(steps), now.fwhm_px)
    if exposure.fault and exposure.fault.streak_e:
        place = now.pointing.to_pixels(np.array([scenario.supernova.ra_deg]), np.array([scenario.supernova.dec_deg]))
        x0, y0 = float(place[0][0]), float(place[1][0])
        add_streak(image, x0, y0, exposure.fault.streak_angle_deg, exposure.fault.streak_e, now.fwhm_px)
    return image


def add_host(image: Floats, scene: Scene, exposure: Exposure, now: Conditions) -> None:
    """Add the host galaxy."""
    scenario = scene.scenario
    mags = {name: np.array([band.galaxy_mag]) for name, band in scenario.bands.items()}
    ra, dec = host_position(scenario)
    x, y = now.pointing.to_pixels(np.array([ra]), np.array([dec]))
    flux = float(_rate_e(scene, exposure, now, mags)[0])
    add_galaxy(image, float(x[0]), float(y[0]), flux, scenario.galaxy, now.pointing, now.fwhm_px)


def host_position(scenario: Scenario) -> tuple[float, float]:
    """RA and Dec of the host's centre, degrees."""
    dec = scenario.supernova.dec_deg + scenario.galaxy.north_arcsec / 3600.0
    ra = scenario.supernova.ra_deg + scenario.galaxy.east_arcsec / 3600.0 / float(np.cos(np.radians(dec)))
    return ra, dec


def take_light(scene: Scene, exposure: Exposure, now: Conditions, rng: np.random.Generator) -> Raw:
    """Raw frame of one light exposure."""
    light_e = render_light(scene, exposure, now, rng)
    return scene.detector.expose(light_e, exposure.filter_in_beam, exposure.exposure_s, rng)
