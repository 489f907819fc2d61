"""Raw frames of nights on bright hosts, drawn with GalSim, and what a perfect measurement could make of them.

The photon limit of a flux F with the true profile P is the Fisher limit 1 / sqrt(sum P² / V), V the true expected
variance of each pixel (everything that shines there, dark current, read noise) after the flat field.
"""

from __future__ import annotations

from dataclasses import dataclass

import galsim
import numpy as np
from bright_host_scene import (
    BANDS,
    COLOUR,
    FIRST_ORDER,
    SECOND_ORDER,
    SITE,
    SKY_MAG,
    ZERO_POINT,
    Camera,
    Host,
    Scene,
    Shot,
)

PRECISION = galsim.GSParams(folding_threshold=2e-3, maximum_fft_size=8192)
MAG_PER_FRACTION = 2.5 / np.log(10)
TRAIL_ARCSEC, DONUT_FWHM = 9.0, 1.6


@dataclass(frozen=True)
class StarTruth:
    """A comparison star on one frame; magnitudes are standard ones."""

    id: str
    mag: float
    limit_mag: float
    """Its own photons, sky and read noise, without the zero point's."""
    saturated: bool


@dataclass(frozen=True)
class FrameTruth:
    file: str
    night: int
    band: str
    mjd: float
    fwhm_arcsec: float
    airmass: float
    fault: str
    """'' for a fault-free frame."""
    mag: float
    limit_mag: float
    """Fisher limit of the target in quadrature with that of the zero point."""
    photon_mag: float
    zero_point_mag: float
    host_mag_arcsec2: float
    """Host's surface brightness at the target in the seeing of the frame, standard magnitudes."""
    stars: tuple[StarTruth, ...]


@dataclass(frozen=True)
class Detector:
    """Fixed patterns, (ny, nx)."""

    camera: Camera
    bias_adu: np.ndarray
    dark_e_per_s: np.ndarray
    sensitivity: dict[str, np.ndarray]

    def read_out(self, mean_e: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """Raw ADU of expected electrons."""
        camera = self.camera
        electrons = rng.poisson(np.maximum(mean_e, 0.0)) + rng.normal(0.0, camera.read_noise_e, mean_e.shape)
        adu = np.rint(electrons / camera.gain_e_per_adu + self.bias_adu)
        return np.clip(adu, 0, camera.saturation_adu).astype(np.uint16)


def make_detector(camera: Camera, seed: int) -> Detector:
    rng = np.random.default_rng([seed, 7])
    yy, xx = np.indices((camera.ny, camera.nx), dtype=float)
    u, v = 2 * xx / (camera.nx - 1) - 1, 2 * yy / (camera.ny - 1) - 1
    bias = camera.bias_adu + 3.0 * u + rng.normal(0, 1.2, camera.nx)[None, :]
    dark = camera.dark_e_per_s * rng.gamma(20.0, 1 / 20.0, u.shape)
    hot = rng.choice(u.size, u.size // 4000, replace=False)
    dark.flat[hot] += rng.uniform(3.0, 120.0, len(hot))
    pixels = 1 + rng.normal(0, 0.008, u.shape)
    dust = np.ones_like(u)
    for _ in range(5):
        x, y, radius = rng.uniform(0, camera.nx), rng.uniform(0, camera.ny), rng.uniform(9, 25)
        dust *= 1 - 0.04 * np.exp(-((np.hypot(xx - x, yy - y) - radius) ** 2) / 20)
    sensitivity = {}
    for k, band in enumerate(BANDS):
        vignetting = 1 - 0.14 * (u**2 + v**2) / 2 + 0.015 * (u * np.cos(k) + v * np.sin(k))
        sensitivity[band] = pixels * dust * vignetting
    return Detector(camera, bias, dark, sensitivity)


def airmass_of(scene: Scene, mjd: float) -> float:
    """Secant of the zenith distance."""
    latitude, longitude, _ = SITE
    hour = np.radians(280.46062 + 360.98564737 * (mjd - 51544.5) + longitude - scene.target_ra_deg)
    lat, dec = np.radians(latitude), np.radians(scene.target_dec_deg)
    return float(1 / (np.sin(lat) * np.sin(dec) + np.cos(lat) * np.cos(dec) * np.cos(hour)))


class Optics:
    """Where light falls in one exposure and how it spreads there; pixels are 0-based."""

    def __init__(self, scene: Scene, shot: Shot) -> None:
        camera = scene.camera
        self.shot, self.camera = shot, camera
        east, north = shot.dither_arcsec
        self.ra, self.dec = scene.ra_deg + east / 3600 / np.cos(np.radians(scene.dec_deg)), scene.dec_deg + north / 3600
        c, s = np.cos(np.radians(shot.rotation_deg)), np.sin(np.radians(shot.rotation_deg))
        self.jacobian = np.array([[-c, -s], [-s, c]]) / camera.scale_arcsec
        """Pixels per arcsec east and north; east is to the left of north."""
        self.fwhm_px = shot.fwhm_arcsec / camera.scale_arcsec

    def pixels(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Gnomonic projection."""
        ra, dec = np.radians(np.asarray(ra_deg) - self.ra), np.radians(dec_deg)
        dec0 = np.radians(self.dec)
        depth = np.sin(dec0) * np.sin(dec) + np.cos(dec0) * np.cos(dec) * np.cos(ra)
        xi = np.degrees(np.cos(dec) * np.sin(ra) / depth) * 3600
        eta = np.degrees((np.cos(dec0) * np.sin(dec) - np.sin(dec0) * np.cos(dec) * np.cos(ra)) / depth) * 3600
        (a, b), (c, d) = self.jacobian
        return (self.camera.nx - 1) / 2 + a * xi + b * eta, (self.camera.ny - 1) / 2 + c * xi + d * eta

    def psf(self, x: float, y: float) -> galsim.GSObject:
        """Seeing x telescope, slightly elliptical and varying over the field; units of pixels."""
        shot, camera = self.shot, self.camera
        u, v = 2 * x / (camera.nx - 1) - 1, 2 * y / (camera.ny - 1) - 1
        fwhm = self.fwhm_px * (1 + shot.size_slope * (u**2 + v**2) / 2)
        if shot.moffat_beta is None:
            seeing = galsim.Kolmogorov(fwhm=fwhm, gsparams=PRECISION)
        else:
            seeing = galsim.Moffat(beta=shot.moffat_beta, fwhm=fwhm, gsparams=PRECISION)
        diffraction = np.degrees(600e-9 / camera.aperture_m) * 3600 / camera.scale_arcsec
        parts = [seeing, galsim.Airy(lam_over_diam=diffraction, obscuration=0.35, gsparams=PRECISION)]
        if shot.fault == "trailed":
            parts.append(galsim.Box(TRAIL_ARCSEC / camera.scale_arcsec, 0.05).rotate(27 * galsim.degrees))
        if shot.fault == "defocus":
            wide = DONUT_FWHM * self.fwhm_px
            parts.append((galsim.TopHat(wide) - galsim.TopHat(0.4 * wide) * 0.16) / 0.84)
        (g1, g2), (s1, s2) = shot.shear, shot.shear_slope
        return galsim.Convolve(parts, gsparams=PRECISION).shear(g1=g1 + s1 * u, g2=g2 + s2 * v)


def image_of(profile: galsim.GSObject, **how: object) -> np.ndarray:
    """What GalSim draws; its obscured disc is NaN on some wave numbers, which a millionth in size avoids."""
    for attempt in range(20):
        drawn = profile.dilate(1 + 1e-6 * attempt).drawImage(**how).array.astype(float)
        if np.isfinite(drawn).all():
            return drawn
    raise ArithmeticError(f"GalSim cannot draw {profile!r}.")


def draw(profile: galsim.GSObject, x: float, y: float, reach_px: float, shape: tuple[int, int]) -> tuple | None:
    """(row slice, column slice, light per pixel) of a profile centred at x, y; None off the frame."""
    x0, y0 = round(x), round(y)
    half = int(np.ceil(reach_px))
    rows = slice(max(y0 - half, 0), min(y0 + half + 1, shape[0]))
    columns = slice(max(x0 - half, 0), min(x0 + half + 1, shape[1]))
    if rows.start >= rows.stop or columns.start >= columns.stop:
        return None
    size = 2 * half + 1
    stamp = image_of(profile, nx=size, ny=size, scale=1.0, offset=(x - x0, y - y0))
    inside = stamp[rows.start - y0 + half : rows.stop - y0 + half, columns.start - x0 + half : columns.stop - x0 + half]
    return rows, columns, inside


class FaintStars:
    """Quick stamps of the many stars that are no comparison stars.

    The PSF of nine cells of the field is sampled five times a pixel: positions snap to a fifth of a pixel.
    """

    def __init__(self, optics: Optics, reach_px: float) -> None:
        self.optics, self.half = optics, int(np.ceil(reach_px))
        self.cells: dict[tuple[int, int], np.ndarray] = {}

    def draw(self, x: float, y: float, flux: float) -> tuple | None:
        """As `draw`."""
        nx, ny, half = self.optics.camera.nx, self.optics.camera.ny, self.half
        x0, y0 = round(x), round(y)
        rows, columns = (
            slice(max(y0 - half, 0), min(y0 + half + 1, ny)),
            slice(max(x0 - half, 0), min(x0 + half + 1, nx)),
        )
        if rows.start >= rows.stop or columns.start >= columns.stop:
            return None
        cell = min(max(int(3 * x / nx), 0), 2), min(max(int(3 * y / ny), 0), 2)
        if cell not in self.cells:
            psf = self.optics.psf((cell[0] + 0.5) * nx / 3, (cell[1] + 0.5) * ny / 3)
            size = 10 * (half + 1) + 1
            seen = galsim.Convolve(psf, galsim.Pixel(1.0), gsparams=PRECISION)
            self.cells[cell] = image_of(seen, nx=size, ny=size, scale=0.2, method="sb")
        middle = 5 * (half + 1)
        first_y = middle + 5 * (rows.start - y0) - round(5 * (y - y0))
        first_x = middle + 5 * (columns.start - x0) - round(5 * (x - x0))
        light = self.cells[cell][first_y::5, first_x::5][: rows.stop - rows.start, : columns.stop - columns.start]
        return rows, columns, flux * light


def host_profile(host: Host, band: str, optics: Optics, flux_of_mag0: float) -> galsim.GSObject:
    """The galaxy before the air, in pixels, fluxes in electrons."""
    parts: list[galsim.GSObject] = []
    (a, b), (c, d) = optics.jacobian
    for part in host.parts:
        flux = flux_of_mag0 * 10 ** (-0.4 * part.mag[band])
        if part.profile == "sersic":
            shape = galsim.Sersic(part.index, half_light_radius=part.radius_arcsec, flux=flux, gsparams=PRECISION)
        else:
            shape = galsim.Gaussian(sigma=part.radius_arcsec, flux=flux, gsparams=PRECISION)
        if part.axis_ratio < 1:
            # Position angles run from north through east: the long axis lies along +north before it is turned.
            shape = shape.shear(q=part.axis_ratio, beta=(90 - part.angle_deg) * galsim.degrees)
        parts.append(shape.shift(part.east_arcsec, part.north_arcsec))
    whole = galsim.Sum(parts, gsparams=PRECISION)
    determinant = abs(a * d - b * c)
    return galsim.Transform(whole, jac=[[a, b], [c, d]], flux_ratio=1 / determinant, gsparams=PRECISION)


def render(scene: Scene, shot: Shot, detector: Detector) -> tuple[np.ndarray, FrameTruth]:
    """Raw frame and truth."""
    rng = np.random.default_rng(shot.seed)
    camera, optics = scene.camera, Optics(scene, shot)
    shape = (camera.ny, camera.nx)
    light_band = scene.wrong_filter_is[shot.band] if shot.fault == "wrong filter" else shot.band
    mjd = shot.mjd_start + shot.exposure_s / 86400 / 2
    airmass = airmass_of(scene, mjd)
    target = scene.target_mag[min(shot.night, len(scene.target_mag) - 1)]

    def electrons(mag: np.ndarray | float, colour: np.ndarray | float) -> np.ndarray:
        slope = scene.colour_term[light_band] - SECOND_ORDER[light_band] * airmass
        zero_point = ZERO_POINT[light_band] - FIRST_ORDER[light_band] * airmass - shot.dimming_mag
        return np.asarray(shot.exposure_s * 10 ** (-0.4 * (mag - zero_point - slope * colour)))

    blue, red = COLOUR[light_band]
    stars = scene.stars
    x, y = optics.pixels(stars.ra_deg, stars.dec_deg)
    twinkle = 0.0032 * (camera.aperture_m / 0.35) ** (-2 / 3) * airmass**1.75 * (shot.exposure_s / 10) ** -0.5
    flux = electrons(stars.mag[light_band], stars.mag[blue] - stars.mag[red]) * rng.normal(1, twinkle, len(x))
    target_x, target_y = (float(v) for v in optics.pixels(np.array(scene.target_ra_deg), scene.target_dec_deg))
    # A difference of the host's colour from the stars' would only scale its light: it has the colour term of B-V 0.7.
    host_flux = float(electrons(0.0, 0.7 if (blue, red) == ("B", "V") else 0.4 if red == "R" else 0.77))
    target_flux = float(electrons(target[light_band], target[blue] - target[red]))
    if shot.fault == "cloud":
        wave, depth = rng.uniform(0, 2 * np.pi, 2), rng.uniform(0.5, 2.0)

        def through(px: np.ndarray | float, py: np.ndarray | float) -> np.ndarray:
            pattern = np.sin(wave[0] + 7.0 * np.asarray(px) / camera.nx) * np.cos(wave[1] + 5.0 * py / camera.ny)
            return np.asarray(10 ** (-0.4 * depth * (1 + 0.35 * pattern)))

        flux, target_flux = flux * through(x, y), target_flux * float(through(target_x, target_y))
        host_flux *= float(through(target_x, target_y))

    xx = np.indices(shape, dtype=float)[1]
    sky_mag = SKY_MAG[light_band] - 2.5 * np.log10(camera.scale_arcsec**2 * shot.sky_brighter)
    sky_e = shot.exposure_s * 10 ** (-0.4 * (sky_mag - ZERO_POINT[light_band]))
    if shot.fault == "saturated":
        # Twilight that leaves the converter little room: the cores of the target and of all brighter stars are cut.
        white = (camera.saturation_adu - camera.bias_adu) * camera.gain_e_per_adu
        response = detector.sensitivity[shot.band][round(target_y), round(target_x)]
        sky_e = (white - 0.2 * target_flux / optics.fwhm_px**2) / response
    image = sky_e * (1 + shot.sky_tilt * (xx / camera.nx - 0.5))
    stamps = []
    wide = 2.5 if shot.fault in ("trailed", "defocus") else 1.0
    faint = FaintStars(optics, max(6 * optics.fwhm_px * wide, 12))
    for k in range(len(x)):
        if k < stars.n_sequence:
            reach = optics.fwhm_px * wide * (18 if flux[k] > 3e5 else 10 if flux[k] > 2e4 else 6)
            drawn = draw(optics.psf(x[k], y[k]).withFlux(flux[k]), x[k], y[k], max(reach, 12), shape)
        else:
            drawn = faint.draw(x[k], y[k], flux[k])
        stamps.append(drawn)
        if drawn is not None:
            image[drawn[0], drawn[1]] += drawn[2]
    here = optics.psf(target_x, target_y)
    galaxy = host_profile(scene.host, light_band, optics, host_flux)
    host_x, host_y = (float(v) for v in optics.pixels(np.array(scene.host.ra_deg), scene.host.dec_deg))
    rows, columns, host_light = draw(
        galsim.Convolve(galaxy, here, gsparams=PRECISION), host_x, host_y, min(110 / camera.scale_arcsec, 300), shape
    )
    image[rows, columns] += np.maximum(host_light, 0.0)
    host_e_px = float(host_light[round(target_y) - rows.start, round(target_x) - columns.start])
    profile = draw(here.withFlux(1.0), target_x, target_y, max(10 * optics.fwhm_px * wide, 12), shape)
    if shot.role != "reference":
        image[profile[0], profile[1]] += target_flux * profile[2]

    response = detector.sensitivity[shot.band]
    collected = image * response + detector.dark_e_per_s * shot.exposure_s
    variance = (collected + camera.read_noise_e**2) / response**2
    star_truth, weight, catalogue_weight = [], 0.0, 0.0
    white = (camera.saturation_adu - camera.bias_adu) * camera.gain_e_per_adu
    for k, name in enumerate(stars.ids()):
        if stamps[k] is None or not (3 < x[k] < camera.nx - 4 and 3 < y[k] < camera.ny - 4):
            continue
        rows, columns, stamp = stamps[k]
        limit = MAG_PER_FRACTION / np.sqrt(np.sum(stamp**2 / variance[rows, columns]))
        full = bool(collected[rows, columns].max() > white)
        star_truth.append(StarTruth(name, float(stars.mag[shot.band][k]), float(limit), full))
        if not full:
            weight += 1 / (limit**2 + (MAG_PER_FRACTION * twinkle) ** 2)
            catalogue_weight += 1 / stars.catalogue_err[shot.band][k] ** 2
    zero_point = (1 / weight + 1 / catalogue_weight) ** 0.5 if weight else np.inf
    photon = MAG_PER_FRACTION / (target_flux * np.sqrt(np.sum(profile[2] ** 2 / variance[profile[0], profile[1]])))

    _disturb(collected, shot, rng, (target_x, target_y), target_flux, float(profile[2].max()), optics)
    truth = FrameTruth(
        shot.name, shot.night, shot.band, mjd, shot.fwhm_arcsec, airmass, shot.fault,
        float(target[shot.band]), float(np.hypot(photon, zero_point)), float(photon), float(zero_point),
        float(-2.5 * np.log10(max(host_e_px, 1e-9) / host_flux / camera.scale_arcsec**2)), tuple(star_truth),
    )  # fmt: skip
    return detector.read_out(collected, rng), truth


def _disturb(
    collected: np.ndarray, shot: Shot, rng: np.random.Generator, at: tuple[float, float], target_e: float,
    peak_share: float, optics: Optics,
) -> None:  # fmt: skip
    """Cosmic rays everywhere, and on or over the target where the fault says so."""
    ny, nx = collected.shape
    for _ in range(rng.poisson(6 * shot.exposure_s / 60 * nx * ny / 1024**2)):
        _ray(collected, rng.uniform(0, nx), rng.uniform(0, ny), rng.uniform(500, 6000), rng)
    if shot.fault == "cosmic ray on target":
        r, angle = rng.uniform(0, 0.8) * optics.fwhm_px, rng.uniform(0, 2 * np.pi)
        place = at[0] + r * np.cos(angle), at[1] + r * np.sin(angle)
        _ray(collected, *place, rng.uniform(0.4, 4.0) * target_e, rng)
    if shot.fault == "satellite over target":
        angle, miss = rng.uniform(0, np.pi), rng.uniform(-0.7, 0.7) * optics.fwhm_px
        yy, xx = np.indices(collected.shape, dtype=float)
        across = (xx - at[0]) * np.sin(angle) - (yy - at[1]) * np.cos(angle) - miss
        height = rng.uniform(0.5, 3.0) * target_e * peak_share
        collected += height * np.exp(-0.5 * (across / (optics.fwhm_px / 2.2)) ** 2)


def _ray(collected: np.ndarray, x: float, y: float, electrons: float, rng: np.random.Generator) -> None:
    ny, nx = collected.shape
    length, angle = int(rng.integers(1, 5)), rng.uniform(0, 2 * np.pi)
    for step in range(length):
        i, j = round(y + step * np.sin(angle)), round(x + step * np.cos(angle))
        if 0 <= i < ny and 0 <= j < nx:
            collected[i, j] += electrons / length
