"""The rendered campaign: the same bytes again, headers, faults, and magnitudes on the pixels."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.utils.exceptions import AstropyUserWarning

from demo_frames.light_frame import draw_conditions, render_light
from demo_frames.render import OTHER_FIELD, Truth, make_scene, read_truth, render
from demo_frames.scenario import read_scenario
from demo_frames.schedule import Exposure, all_exposures, frame_path
from demo_frames.star_field import draw_star_field
from reduce.settings import read_settings

SCENARIO = read_scenario()


@pytest.fixture(scope="module")
def campaign(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Truth]:
    folder = tmp_path_factory.mktemp("campaign")
    return folder, render(folder, 7)


def _digests(folder: Path) -> dict[str, str]:
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_same_seed_gives_the_same_bytes_and_another_does_not(campaign: tuple[Path, Truth], tmp_path: Path) -> None:
    counted: list[tuple[int, int]] = []
    render(tmp_path / "again", 7, progress=lambda done, n: counted.append((done, n)))
    first, again = _digests(campaign[0]), _digests(tmp_path / "again")
    assert first == again
    assert counted == [(k + 1, len(counted)) for k in range(len(counted))]
    assert len(counted) == sum(name.startswith("frames/") for name in again)
    other = make_scene(SCENARIO, 8, scatter=False)
    assert other.supernova.mu != campaign[1].mu_true
    assert not np.array_equal(other.stars.ra_deg, make_scene(SCENARIO, 7, scatter=False).stars.ra_deg)


def test_truth_survives_the_disk(campaign: tuple[Path, Truth]) -> None:
    assert read_truth(campaign[0]) == campaign[1]


def test_file_names_are_unique_without_their_folder() -> None:
    names = [frame_path(SCENARIO, exposure).rpartition("/")[2] for exposure in all_exposures(SCENARIO)]
    assert len(set(names)) == len(names)


def test_every_night_has_three_good_frames_in_each_band(campaign: tuple[Path, Truth]) -> None:
    kept = [frame for frame in campaign[1].frames if frame.expected == "kept"]
    nights = {frame.night for frame in kept}
    assert len(nights) == 12
    for night in nights:
        assert sorted(f.band for f in kept if f.night == night) == sorted("BBBVVVRRRIII")
    assert all(1.0 <= frame.airmass < 2.0 for frame in campaign[1].frames)


def test_exposures_of_a_night_do_not_overlap() -> None:
    lights = [exposure for exposure in all_exposures(SCENARIO) if exposure.kind == "light"]
    for before, after in pairwise(lights):
        assert after.start_mjd > before.start_mjd + before.exposure_s / 86400.0


def test_settings_parse(campaign: tuple[Path, Truth]) -> None:
    settings = read_settings(campaign[0] / "observatory.toml")
    assert settings.site is not None
    assert settings.site.latitude_deg == SCENARIO.site.latitude_deg
    assert settings.camera.read_noise_e == SCENARIO.camera.read_noise_e
    assert settings.photometry.second_order_extinction == {"B": -0.03}


def test_comparison_sequence_is_the_truth_with_its_stated_errors(campaign: tuple[Path, Truth]) -> None:
    rows = np.genfromtxt(campaign[0] / "comparison.csv", delimiter=",", names=True, dtype=None, encoding="utf-8")
    truth = campaign[1]
    assert [str(name) for name in rows["id"]] == [star.id for star in truth.stars]
    assert rows["ra"] == pytest.approx([star.ra_deg for star in truth.stars], abs=1e-6)
    pulls = np.concatenate([
        (rows[band] - [star.mag[band] for star in truth.stars]) / rows[f"{band}_err"] for band in "BVRI"
    ])  # fmt: skip
    # 240 pulls: their rms is 1 within 0.046
    assert np.sqrt(np.mean(pulls**2)) == pytest.approx(1.0, abs=0.14)
    colour = rows["B"] - rows["V"]
    assert colour.min() < 0.5
    assert colour.max() > 1.2


def test_headers(campaign: tuple[Path, Truth]) -> None:
    folder, truth = campaign
    for frame in truth.frames:
        if frame.fault:
            continue
        cards = fits.getheader(folder / "frames" / frame.path)
        assert (cards["FILTER"], cards["IMAGETYP"], cards["OBJECT"]) == (frame.band, "Light Frame", truth.target)
        start = np.datetime64(cards["DATE-OBS"]) - np.datetime64("1858-11-17T00:00:00")
        mjd_mid = start / np.timedelta64(1, "ms") / 86400e3 + cards["EXPTIME"] / 2 / 86400
        assert mjd_mid == pytest.approx(frame.mjd_mid, abs=1e-8)
        hours = [float(part) for part in cards["RA"].split()]
        ra_deg = 15 * (hours[0] + hours[1] / 60 + hours[2] / 3600)
        assert ra_deg == pytest.approx(truth.ra_deg, abs=0.1)
        assert "CRVAL1" not in cards
        assert cards["BZERO"] == 32768


def _fault(truth: Truth, name: str) -> str:
    return next(frame.path for frame in truth.frames if frame.fault == name)


def test_broken_files_are_broken(campaign: tuple[Path, Truth]) -> None:
    folder, truth = campaign[0] / "frames", campaign[1]
    assert (folder / _fault(truth, "empty")).read_bytes() == b""
    assert not (folder / _fault(truth, "text")).read_bytes().startswith(b"SIMPLE")
    cut = folder / _fault(truth, "truncated")
    assert cut.read_bytes().startswith(b"SIMPLE")
    with (
        pytest.warns(AstropyUserWarning, match="truncated"),
        fits.open(cut, memmap=False) as hdus,
        pytest.raises((TypeError, ValueError, OSError)),
    ):
        _ = hdus[0].data


def test_unusual_files_hold_good_frames(campaign: tuple[Path, Truth]) -> None:
    folder, truth = campaign[0] / "frames", campaign[1]
    shape = (SCENARIO.camera.ny, SCENARIO.camera.nx)
    assert _fault(truth, "compressed").endswith(".fits.fz")
    with fits.open(folder / _fault(truth, "compressed")) as hdus:
        assert isinstance(hdus[1], fits.CompImageHDU)
        assert hdus[1].data.shape == shape
        assert hdus[1].header["FILTER"] == "V"
        assert hdus[1].data.dtype == np.uint16
    with fits.open(folder / _fault(truth, "extension")) as hdus:
        assert hdus[0].data is None
        assert hdus[0].header["FILTER"] == "R"
        assert hdus["SCI"].data.shape == shape
    assert fits.getheader(folder / _fault(truth, "wrong object"))["OBJECT"] != truth.target


def test_every_fault_of_the_scenario_is_told(campaign: tuple[Path, Truth]) -> None:
    told = {frame.fault: frame.expected for frame in campaign[1].frames if frame.fault}
    assert told == {fault.name: fault.expected for fault in SCENARIO.faults}
    for frame in campaign[1].frames:
        assert (frame.true_mag is None) == (frame.fault in ("another field", "truncated", "empty", "text"))


def _light(fault: str, band: str = "V") -> Exposure:
    return next(
        exposure
        for exposure in all_exposures(SCENARIO)
        if exposure.kind == "light" and (exposure.fault.name if exposure.fault else "") == fault
        and exposure.band == band
    )  # fmt: skip


def test_a_star_on_the_pixels_has_its_magnitude() -> None:
    """Noiseless aperture sums of comparison stars against the photometric equation, without sky and twinkling."""
    still = replace(SCENARIO, telescope=replace(SCENARIO.telescope, scintillation_coefficient=0.0))
    scene = make_scene(still, 2, scatter=False)
    exposure, band = _light("", "B"), still.bands["B"]
    now = draw_conditions(scene, exposure, np.random.default_rng(3))
    image = render_light(scene, exposure, now, np.random.default_rng(3))
    yy, xx = np.indices(image.shape)
    x, y = now.pointing.to_pixels(scene.stars.ra_deg, scene.stars.dec_deg)
    n_seen = 0
    for k in range(scene.stars.n_comparison):
        radius = np.hypot(xx - x[k], yy - y[k])
        everything = np.hypot(x - x[k], y - y[k])
        if np.sort(everything)[1] < 35.0 or not (20 < x[k] < 490 and 20 < y[k] < 490):
            continue
        inside = radius < 14.0
        ring = (radius > 17.0) & (radius < 20.0)
        flux = image[inside].sum() - inside.sum() * np.median(image[ring])
        mags = {name: values[k] for name, values in scene.stars.mag.items()}
        slope = band.colour_term - band.second_order * now.airmass
        measured = -2.5 * np.log10(flux / exposure.exposure_s) + now.zero_point + slope * (mags["B"] - mags["V"])
        assert measured == pytest.approx(mags["B"], abs=1e-3)
        n_seen += 1
    assert n_seen >= 3


def test_cloud_dims_and_is_patchy() -> None:
    scene, rng = make_scene(SCENARIO, 2, scatter=False), np.random.default_rng(1)
    exposure = _light("cloud")
    now = draw_conditions(scene, exposure, rng)
    clear = draw_conditions(scene, replace(exposure, fault=None), np.random.default_rng(1))
    assert clear.zero_point - now.zero_point == pytest.approx(1.5)
    cloudy, good = (
        render_light(scene, shot, state, np.random.default_rng(2))
        for shot, state in ((exposure, now), (replace(exposure, fault=None), clear))
    )
    x, y = now.pointing.to_pixels(scene.stars.ra_deg[:60], scene.stars.dec_deg[:60])
    column, row = np.rint(x).astype(int), np.rint(y).astype(int)
    sky_cloudy, sky_good = np.median(cloudy), np.median(good)
    dimming = -2.5 * np.log10((cloudy[row, column] - sky_cloudy) / (good[row, column] - sky_good))
    assert np.mean(dimming) == pytest.approx(1.5, abs=0.2)
    assert np.std(dimming) > 0.1


def test_trailed_stars_are_long() -> None:
    scene, exposure = make_scene(SCENARIO, 2, scatter=False), _light("trailed", "R")
    now = draw_conditions(scene, exposure, np.random.default_rng(1))
    image = render_light(scene, exposure, now, np.random.default_rng(1))
    x, y = now.pointing.to_pixels(scene.stars.ra_deg, scene.stars.dec_deg)
    bright = int(np.argmin(scene.stars.mag["R"][:60]))
    j, i = round(float(x[bright])), round(float(y[bright]))
    stamp = image[i - 15 : i + 16, j - 15 : j + 16] - np.median(image)
    wide = stamp.sum(axis=0) > 0.5 * stamp.sum(axis=0).max()
    assert wide.sum() == pytest.approx(12.0 / SCENARIO.camera.scale_arcsec, abs=1.5)
    assert (stamp.sum(axis=1) > 0.5 * stamp.sum(axis=1).max()).sum() < 5


@pytest.mark.parametrize("seed", range(1, 41))
def test_the_overexposed_frame_saturates_the_target(seed: int) -> None:
    scene, exposure = make_scene(SCENARIO, seed, scatter=False), _light("overexposed", "R")
    now = draw_conditions(scene, exposure, np.random.default_rng(seed))
    image = render_light(scene, exposure, now, np.random.default_rng(seed))
    ra, dec = np.array([SCENARIO.supernova.ra_deg]), np.array([SCENARIO.supernova.dec_deg])
    x, y = now.pointing.to_pixels(ra, dec)
    peak_adu = image[round(float(y[0])), round(float(x[0]))] / SCENARIO.camera.gain_e_per_adu
    assert peak_adu > 1.1 * SCENARIO.camera.saturation_adu


def test_another_field_shares_no_star() -> None:
    ours, other = draw_star_field(SCENARIO, 2), draw_star_field(SCENARIO, 2 + OTHER_FIELD)
    apart = np.hypot(
        (ours.ra_deg[:, None] - other.ra_deg[None, :]) * np.cos(np.radians(21.6)),
        ours.dec_deg[:, None] - other.dec_deg[None, :],
    )
    assert (apart.min(axis=1) * 3600 < 2.0).sum() <= 2


def test_a_satellite_crosses_the_supernova_and_leaves_the_rest() -> None:
    scene, exposure = make_scene(SCENARIO, 2, scatter=False), _light("satellite", "R")
    now = draw_conditions(scene, exposure, np.random.default_rng(1))
    crossed, clear = (
        render_light(scene, shot, now, np.random.default_rng(2)) for shot in (exposure, replace(exposure, fault=None))
    )
    streak = crossed - clear
    target = SCENARIO.supernova
    x, y = now.pointing.to_pixels(np.array([target.ra_deg]), np.array([target.dec_deg]))
    assert streak[round(float(y[0])), round(float(x[0]))] > 0.8 * 400.0
    assert np.mean(streak > 10.0) < 0.03
    assert np.ptp(np.nonzero(streak > 10.0)[1]) == SCENARIO.camera.nx - 1


def test_a_slipped_wheel_shows_the_other_filter() -> None:
    scene, exposure = make_scene(SCENARIO, 2, scatter=False), _light("wheel slip", "V")
    through_r = replace(exposure, fault=None, band="R")
    drawn = [draw_conditions(scene, shot, np.random.default_rng(1)) for shot in (exposure, through_r)]
    assert drawn[0] == drawn[1]
    images = [render_light(scene, shot, drawn[0], np.random.default_rng(2)) for shot in (exposure, through_r)]
    assert np.array_equal(*images)
