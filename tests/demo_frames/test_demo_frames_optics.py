"""Star images, projection and detector against the outside: exact integrals, astropy.wcs, Poisson statistics."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.coordinates import AltAz, EarthLocation, SkyCoord
from astropy.time import Time
from astropy.utils import iers
from astropy.wcs import WCS

from demo_frames.atmosphere import airmass, altitude_deg, moon_illumination, scintillation
from demo_frames.detector import make_detector
from demo_frames.optics import Pointing, add_galaxy, add_star
from demo_frames.scenario import SiteScene, TelescopeScene, read_scenario

SCENARIO = read_scenario()


@pytest.mark.parametrize("fwhm_px", [1.8, 2.3, 3.5])
@pytest.mark.parametrize(("x", "y"), [(60.0, 60.0), (60.37, 59.81)])
def test_star_holds_its_flux_to_a_millimag(fwhm_px: float, x: float, y: float) -> None:
    image = np.zeros((121, 121))
    add_star(image, x, y, 1e5, fwhm_px)
    assert -2.5 * np.log10(image.sum() / 1e5) == pytest.approx(0.0, abs=1e-3)
    yy, xx = np.indices(image.shape)
    assert (image * xx).sum() / image.sum() == pytest.approx(x, abs=0.01)
    assert (image * yy).sum() / image.sum() == pytest.approx(y, abs=0.01)


def test_star_pixels_are_integrals_of_the_profile() -> None:
    fwhm_px, x, y = 1.8, 20.3, 19.6
    image = np.zeros((41, 41))
    add_star(image, x, y, 1.0, fwhm_px)
    core = fwhm_px / (2.0 * np.sqrt(2.0 ** (1 / 3.5) - 1.0))
    fine = (np.arange(5 * 200) + 0.5) / 200 - 0.5
    dx, dy = fine + 18 - x, fine + 17 - y
    profile = 2.5 / (np.pi * core**2) * (1 + (dx[None, :] ** 2 + dy[:, None] ** 2) / core**2) ** -3.5
    expected = profile.reshape(5, 200, 5, 200).mean(axis=(1, 3))
    assert image[17:22, 18:23] == pytest.approx(expected, rel=2e-3, abs=1e-6)


def test_star_off_the_frame_adds_only_what_falls_on_it() -> None:
    image = np.zeros((30, 30))
    add_star(image, -100.0, 5.0, 1e5, 2.0)
    assert not image.any()
    add_star(image, -0.5, 15.0, 1e5, 2.0)
    assert image.sum() == pytest.approx(5e4, rel=2e-3)


@pytest.mark.parametrize("rotation_deg", [0.0, 2.0, 93.0, 182.0, 355.5])
def test_positions_agree_with_astropy_wcs(rotation_deg: float) -> None:
    pointing = Pointing(167.5, 21.6, rotation_deg, 1.021, 255.5, 255.5)
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [167.5, 21.6]
    wcs.wcs.crpix = [256.5, 256.5]
    wcs.wcs.cd = pointing.cd_deg
    ra, dec = 167.5 + np.array([-0.07, 0.0, 0.05]), 21.6 + np.array([0.03, 0.0, -0.06])
    expected = wcs.all_world2pix(np.column_stack([ra, dec]), 0)
    assert np.column_stack(pointing.to_pixels(ra, dec)) == pytest.approx(expected, abs=1e-6)


def test_north_is_up_and_east_to_the_left_without_rotation() -> None:
    pointing = Pointing(100.0, 0.0, 0.0, 1.0, 50.0, 50.0)
    x, y = pointing.to_pixels(np.array([100.0, 100.0 + 10 / 3600]), np.array([10 / 3600, 0.0]))
    assert (x[0], y[0]) == pytest.approx((50.0, 60.0), abs=1e-6)
    assert (x[1], y[1]) == pytest.approx((40.0, 50.0), abs=1e-6)


def test_host_lies_where_it_is_said_to() -> None:
    pointing = Pointing(0.0, 0.0, 0.0, 1.0, 100.0, 100.0)
    image = np.zeros((201, 201))
    scene = SCENARIO.galaxy
    add_galaxy(image, 100.0 - scene.east_arcsec, 100.0 + scene.north_arcsec, 1.0, scene, pointing, 2.5)
    peak_y, peak_x = np.unravel_index(image.argmax(), image.shape)
    assert (peak_x, peak_y) == (100 - scene.east_arcsec, 100 + scene.north_arcsec)
    assert image.sum() == pytest.approx(1.0, rel=0.05)  # blunted at the centre, cut at the edge


@pytest.mark.parametrize(("band", "faintest_mag"), [("B", 16.8), ("V", 15.9), ("R", 15.7), ("I", 15.7)])
def test_host_biases_the_supernova_by_less_than_a_hundredth(band: str, faintest_mag: float) -> None:
    """Aperture of 1.5 FWHM and median of an annulus of 4 to 7 FWHM, in the worst seeing."""
    pointing = Pointing(0.0, 0.0, 0.0, 1.0, 100.0, 100.0)
    image, scene, fwhm_px = np.zeros((201, 201)), SCENARIO.galaxy, 3.6
    add_galaxy(image, 100.0 - scene.east_arcsec, 100.0 + scene.north_arcsec, 1.0, scene, pointing, fwhm_px)
    yy, xx = np.indices(image.shape)
    radius = np.hypot(xx - 100, yy - 100) / fwhm_px
    inside, ring = radius <= 1.5, (radius >= 4.0) & (radius <= 7.0)
    excess = image[inside].sum() - inside.sum() * np.median(image[ring])
    assert abs(excess) * 10 ** (-0.4 * (SCENARIO.bands[band].galaxy_mag - faintest_mag)) < 0.01


def test_noise_is_poisson_and_read_noise() -> None:
    detector = make_detector(SCENARIO.camera, ("V",), 3)
    detector.sensitivity["V"][:] = 1.0
    rng = np.random.default_rng(5)
    light = np.full(detector.bias_adu.shape, 900.0)
    first, second = (detector.expose(light, "V", 0.01, rng).astype(float) for _ in range(2))
    variance_e2 = np.var(first - second) / 2.0 * SCENARIO.camera.gain_e_per_adu**2
    # 262 144 differences: relative error of a variance 0.3 %; converter steps add gain²/12.
    expected = 900.0 + SCENARIO.camera.read_noise_e**2 + SCENARIO.camera.gain_e_per_adu**2 / 12.0
    assert variance_e2 == pytest.approx(expected, rel=0.012)
    mean_e = (first - detector.bias_adu).mean() * SCENARIO.camera.gain_e_per_adu
    assert mean_e == pytest.approx(900.0, rel=1e-3)


def test_detector_has_its_flaws() -> None:
    detector = make_detector(SCENARIO.camera, ("B", "V"), 1)
    camera = SCENARIO.camera
    assert (detector.dark_e_per_s > 5.0).sum() == camera.hot_pixels
    column = detector.sensitivity["V"][:, camera.dead_column]
    assert column.max() < 0.1
    assert detector.sensitivity["V"][0, 0] < 0.95 * detector.sensitivity["V"][250:260, 250:260].mean()
    assert not np.array_equal(detector.sensitivity["B"], detector.sensitivity["V"])
    flooded = detector.expose(np.full(detector.bias_adu.shape, 3e5), "V", 1.0, np.random.default_rng(1))
    assert np.median(flooded) == camera.saturation_adu


def test_altitude_agrees_with_astropy() -> None:
    site = SCENARIO.site
    place = EarthLocation.from_geodetic(site.longitude_deg, site.latitude_deg, site.height_m)
    target = SkyCoord(SCENARIO.supernova.ra_deg, SCENARIO.supernova.dec_deg, unit="deg")
    mjd = np.array([night.start_mjd for night in SCENARIO.nights])
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        expected = target.transform_to(AltAz(obstime=Time(mjd, format="mjd"), location=place)).alt.deg
    ours = [altitude_deg(t, target.ra.deg, target.dec.deg, site) for t in mjd]
    # Aberration, nutation and UT1 - UTC are left out: under 40 arcsec together.
    assert ours == pytest.approx(expected, abs=0.015)


@pytest.mark.parametrize(
    ("altitude", "expected"),
    [
        # Kasten & Young 1989 formula, evaluated
        (60.0, 1.1540),
        (45.0, 1.4126),
        (30.0, 1.9943),
    ],
)
def test_airmass(altitude: float, expected: float) -> None:
    assert airmass(altitude) == pytest.approx(expected, abs=0.002)


def test_scintillation() -> None:
    # Osborn et al. 2015 (MNRAS 452, 1707) with C_Y 1.5, D 0.5 m, X 1.5, 60 s, 1000 m, evaluated by hand
    site = SiteScene("", 0.0, 0.0, 1000.0)
    telescope = TelescopeScene("", 0.5, 1.5, 1.0)
    assert scintillation(telescope, site, 1.5, 60.0) == pytest.approx(0.0015760, rel=1e-4)


def test_moon() -> None:
    # Full Moon and total lunar eclipse of 2025 March 14, 06:55 UT (almanac, from memory)
    assert moon_illumination(60748.29) > 0.98
    # New Moon and partial solar eclipse of 2025 March 29, 10:58 UT (almanac, from memory)
    assert moon_illumination(60763.46) < 0.02
