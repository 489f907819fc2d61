"""The renderer of nights on bright hosts is what it says, and the whole path runs on its frames."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import bright_hosts
import numpy as np
import pytest
from bright_host_frames import Optics, make_detector, render
from bright_host_scene import EXPOSURE_S, Plan, draw_scene
from bright_host_table import table
from landolt_frames import BANDS, Truth, compare

CALM = Plan(1, 1, ("V",), 512, references_per_band=1, faults_per_night=0)


@pytest.fixture(scope="module")
def scene():
    return draw_scene(3, 0, CALM)


@pytest.fixture(scope="module")
def detector(scene):
    return make_detector(scene.camera, 3)


def calibrated(detector, raw, exposure_s):
    """Electrons with the fixed patterns as they were rendered."""
    camera = detector.camera
    e = (raw - detector.bias_adu) * camera.gain_e_per_adu - detector.dark_e_per_s * exposure_s
    return e / detector.sensitivity["V"]


def aperture(image, x, y, radius):
    """Light in a circle above the median of a ring."""
    yy, xx = np.indices(image.shape)
    r = np.hypot(xx - x, yy - y)
    sky = np.median(image[(r > 1.5 * radius) & (r < 2.2 * radius)])
    return float((image[r < radius] - sky).sum())


def test_stars_have_the_light_of_their_magnitudes_and_errors_near_the_limit(scene, detector):
    shot = replace(scene.shots[0], moffat_beta=None, fwhm_arcsec=2.2)
    raw, truth = render(scene, shot, detector)
    image, optics = calibrated(detector, raw, EXPOSURE_S), Optics(scene, shot)
    x, y = optics.pixels(scene.stars.ra_deg, scene.stars.dec_deg)
    off, limit = [], []
    for star in truth.stars:
        k = scene.stars.ids().index(star.id)
        inside = min(x[k], y[k], scene.camera.nx - x[k], scene.camera.ny - y[k]) > 30
        if inside and star.limit_mag < 0.01 and not star.saturated:
            off.append(-2.5 * np.log10(aperture(image, x[k], y[k], 4 * optics.fwhm_px)) - star.mag)
            limit.append(star.limit_mag)
    off = np.array(off) - np.median(off)
    assert len(off) >= 6
    assert np.median(np.abs(off)) < 0.012
    assert np.median(limit) > 0.0005


def test_the_limit_falls_with_the_square_root_of_time_and_rises_with_the_seeing(scene, detector):
    shot = replace(scene.shots[0], fwhm_arcsec=1.8)
    photon = [
        render(scene, s, detector)[1].photon_mag
        for s in (shot, replace(shot, exposure_s=4 * shot.exposure_s), replace(shot, fwhm_arcsec=3.2))
    ]
    assert photon[0] / photon[1] == pytest.approx(2.0, rel=0.12)
    assert photon[2] > 1.15 * photon[0]


def test_a_frame_is_the_same_whenever_it_is_rendered(scene, detector):
    frames = [render(scene, scene.shots[0], detector)[0] for _ in range(2)]
    assert np.array_equal(*frames)


def test_the_reference_holds_no_supernova(scene, detector):
    flux = {}
    for shot in scene.shots:
        bright = replace(scene, target_mag=(dict.fromkeys(BANDS, 13.0),))
        raw, _ = render(bright, shot, detector)
        optics = Optics(scene, shot)
        x, y = optics.pixels(np.array(scene.target_ra_deg), np.array(scene.target_dec_deg))
        image = calibrated(detector, raw, shot.exposure_s) / shot.exposure_s
        flux[shot.role] = image[round(float(y)), round(float(x))]
    assert flux["night"] > 5 * flux["reference"]


@pytest.mark.slow
def test_two_hosts_through_the_whole_path(tmp_path: Path):
    plan = replace(bright_hosts.QUICK, bands=("V",), references_per_band=0, faults_per_night=0)
    found = bright_hosts.run(range(2), 5, plan, ("host",), tmp_path, processes=2, keep=False)
    assert len(found.frames) == 6
    kept = [f for f in found.frames if f.state == "kept"]
    assert len(kept) >= 5
    assert np.median([abs(f.mag - f.true_mag) for f in kept]) < 0.5
    assert all(f.err > 0 for f in kept)
    stars = [s for s in found.stars if s.state == "kept" and not s.saturated]
    assert np.median([abs(s.mag - s.true_mag) for s in stars]) < 0.02
    lines, _ = table(found, found)
    assert any("rms(d/limit)" in line for line in lines)


def test_landolt_values_are_held_against_what_was_rendered():
    truth = {"V": Truth({"2024-01-14": 21.5, "2024-01-21": 21.5}, 0.16, -0.04)}

    def printed(**changed):
        nights = [{"night": n, "zp_mag": 21.501, "extinction": 0.158} | changed for n in truth["V"].zp_mag]
        return [{"band": "V", "colour_term": -0.041, "nights": nights}]

    assert compare(printed(), truth)[1] == 0
    assert compare(printed(zp_mag=21.52), truth)[1] == 2
    assert compare(printed(extinction=float("nan")), truth)[1] == 2
    assert compare([], truth)[1] == 2
