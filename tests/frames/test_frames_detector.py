"""What flats and biases say of an invented detector must be what it does, and be said when it is not stated."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from camera_truth import NX, NY, CameraTruth, vignetting
from frame_files import write

from reduce.frames.calibrate import calibrate
from reduce.frames.detector import converter_step_adu, saturation_level
from reduce.frames.detector_check import (
    DetectorMeasure,
    Stated,
    disagreements,
    pair_gain,
    stated_of,
    straightness,
)
from reduce.frames.fringe import finished
from reduce.frames.master_pixels import read_master
from reduce.frames.master_plans import plan_masters
from reduce.frames.master_sets import ChosenMasters, Master, choose_masters
from reduce.frames.masters import build_master
from reduce.frames.reader import frame_id, open_frame
from reduce.records import CalibratedImage, FrameError, FrameInfo, PixelFlag
from reduce.settings import Camera, Settings

SATURATED = Settings(camera=Camera(saturation_adu=65535))


def masters_of(folder: Path, settings: Settings = SATURATED) -> list[Master]:
    rows = [(frame_id(path), path, open_frame(path, settings).info) for path in sorted(folder.glob("*.fits"))]
    made: list[Master] = []
    for plan in plan_masters(rows):
        made.append(build_master(plan, made, folder / "masters", settings))
    return made


def flat_of(made: list[Master]) -> Master:
    return next(master for master in made if master.kind == "flat")


def shutter_of(made: list[Master]) -> Master:
    return next(master for master in made if master.kind == "shutter")


def biases(folder: Path, camera: CameraTruth, n: int = 12) -> None:
    for k in range(n):
        write(folder / f"bias{k:02d}.fits", camera.adu(0.0, 0.0, 50 + k), IMAGETYP="bias", EXPTIME=0.0)


def flats(folder: Path, camera: CameraTruth, rates: list[float], exposures_s: list[float], tilt: float = 0.0) -> None:
    x = np.linspace(-1.0, 1.0, NX)[None, :]
    for k, (rate, exposure_s) in enumerate(zip(rates, exposures_s, strict=True)):
        sky = rate * (1.0 + tilt * k * x)
        write(
            folder / f"flat{k:02d}.fits", camera.adu(sky, exposure_s, 300 + k), IMAGETYP="flat", EXPTIME=exposure_s,
            **{"DATE-OBS": f"2024-03-10T18:{10 + k:02d}:00"},
        )  # fmt: skip


@pytest.mark.parametrize(("gain", "read_noise_e"), [(0.4, 3.0), (1.5, 8.0), (2.6, 14.0)])
def test_gain_and_read_noise_come_from_twilight_flats_that_fade_and_turn(tmp_path, gain, read_noise_e):
    camera = CameraTruth(gain=gain, read_noise_e=read_noise_e)
    biases(tmp_path, camera)
    levels = [30000.0 * 0.9**k for k in range(8)]
    flats(tmp_path, camera, [level * gain / 3.0 for level in levels], [3.0] * 8, tilt=0.01)
    found = flat_of(masters_of(tmp_path)).detector
    assert found is not None
    assert found.n_pairs == 4
    assert found.gain_e_per_adu == pytest.approx(gain, rel=0.02)
    assert found.gain_err is not None
    assert abs(found.gain_e_per_adu - gain) < 4.0 * found.gain_err
    assert found.gain_err < 0.01 * gain
    assert found.read_noise_e == pytest.approx(read_noise_e, rel=0.03)
    assert (found.straight_to_adu, found.full_adu) == (None, None)  # a fading sky says nothing of linearity


def test_pair_gain_of_flats_that_are_no_noisier_than_biases_is_refused():
    with pytest.raises(ValueError, match="brighter and noisier"):
        pair_gain(np.full((64, 64), 1000.0, np.float32), np.full((64, 64), 1000.0, np.float32), 9.0)


LAMP_S = [2.0, 4.0, 6.0, 8.0, 10.0, 12.0, 14.0, 16.0]


@pytest.mark.parametrize("bend", [0.0, 0.05])
def test_linearity_is_measured_with_a_steady_lamp(tmp_path, bend):
    camera = CameraTruth(bend=bend)
    biases(tmp_path, camera)
    flats(tmp_path, camera, [5000.0] * 8, LAMP_S)  # 6700 to 53300 ADU
    found = flat_of(masters_of(tmp_path)).detector
    assert found is not None
    assert found.straight_to_adu is not None
    if bend == 0.0:
        assert found.straight_to_adu > 50000.0
        assert found.bent_from_adu is None
    else:
        # Against a straight line through the fainter half, as any such measurement is made
        assert found.bent_from_adu is not None
        assert 30000.0 < found.bent_from_adu < 50000.0
        assert found.straight_to_adu < found.bent_from_adu


def test_an_unsteady_lamp_says_nothing_of_linearity():
    rng = np.random.default_rng(2)
    levels = np.repeat(LAMP_S, 2) * 3000.0 * (1.0 + rng.normal(0.0, 0.02, 16))
    assert straightness(np.repeat(LAMP_S, 2), levels, levels + 1000.0) == (None, None)


def test_a_single_flat_that_is_off_is_not_the_detector():
    levels = np.array(LAMP_S) * 3000.0
    levels[5] *= 0.97
    straight, bent = straightness(LAMP_S, levels, levels + 1000.0)
    assert (straight, bent) == (pytest.approx(49000.0), None)


@pytest.mark.parametrize("lengths", [[5.0] * 8, [5.0, 5.5, 6.0, 6.5], [2.0, 8.0]])
def test_few_lengths_say_nothing_of_linearity(lengths):
    assert straightness(lengths, np.array(lengths) * 3000.0, np.array(lengths) * 3000.0) == (None, None)


def test_full_pixels_below_the_stated_saturation_are_found(tmp_path):
    camera = CameraTruth()
    biases(tmp_path, camera)
    flats(tmp_path, camera, [15000.0] * 6, [3.0] * 6)
    write(tmp_path / "full.fits", np.minimum(camera.adu(60000.0, 3.0, 9), 50000), IMAGETYP="flat", EXPTIME=3.0)
    found = flat_of(masters_of(tmp_path)).detector
    assert found is not None
    assert found.full_adu == 50000.0


# ---- what is said ----------------------------------------------------------------------------------------

RIGHT = DetectorMeasure(1.50, 0.01, 4, 8.0, 50000.0, None, None)


def said(measured: DetectorMeasure = RIGHT, **stated: float | None) -> str:
    of_it = {"gain_e_per_adu": 1.5, "read_noise_e": 8.0, "saturation_adu": 65535.0, "linear_limit_adu": None, **stated}
    return " ".join(disagreements("flat V", measured, Stated(**of_it)))


def test_nothing_is_said_where_all_agrees():
    assert said() == ""
    assert said(gain_e_per_adu=1.6, read_noise_e=9.0) == ""  # within 10 and 20 %


@pytest.mark.parametrize(
    ("stated", "measured", "words"),
    [
        ({"gain_e_per_adu": 1.2}, {}, "gain 1.50 ± 0.01 e-/ADU measured, 1.2 stated"),
        ({"gain_e_per_adu": None}, {}, "not stated; it is used"),
        ({"read_noise_e": 5.0}, {}, "read noise 8.0 e- measured, 5 stated"),
        ({"read_noise_e": None}, {}, "read noise 8.0 e- measured, and not stated"),
        ({}, {"full_adu": 50000.0}, "full at 50000 ADU, 65535 stated"),
        ({"saturation_adu": None}, {"full_adu": 50000.0}, "full at 50000 ADU, not stated"),
        ({}, {"bent_from_adu": 48000.0, "straight_to_adu": 45000.0}, "linear_limit_adu = 45000"),
    ],
)
def test_disagreements(stated, measured, words):
    assert words in said(replace(RIGHT, **measured), **stated)


def test_an_uncertain_measurement_accuses_nobody():
    assert said(replace(RIGHT, gain_err=0.3), gain_e_per_adu=1.2) == ""


def test_a_stated_linear_limit_below_the_bend_is_right():
    assert said(replace(RIGHT, bent_from_adu=48000.0), linear_limit_adu=46000.0) == ""


def test_settings_override_headers_only_when_asked():
    info = light(gain_e_per_adu=3.0, read_noise_e=12.0, saturation_adu=50000.0)
    camera = Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=60000)
    assert stated_of(info, Settings(camera=camera)) == Stated(3.0, 12.0, 50000.0, None)
    camera = camera.model_copy(update={"overrides_header": True})
    assert stated_of(info, Settings(camera=camera)) == Stated(1.5, 8.0, 60000.0, None)
    image = calibrate(np.full((NY, NX), 1500, np.float32), info, ChosenMasters(), Settings(camera=camera))
    assert (image.gain_e_per_adu, image.read_noise_e, image.saturation_e) == (1.5, 8.0, 90000.0)


# ---- in the calibrated frame -----------------------------------------------------------------------------


def light(exposure_s: float = 60.0, **changes: object) -> FrameInfo:
    return replace(
        FrameInfo(
            kind="light", band="V", filter_name="V", object_name="", camera="cam", mjd_mid=60380.0,
            exposure_s=exposure_s, ra_deg=None, dec_deg=None, scale_arcsec=None, gain_e_per_adu=None,
            read_noise_e=None, saturation_adu=None, nx=NX, ny=NY,
        ),
        **changes,
    )  # fmt: skip


def test_where_nobody_states_gain_and_read_noise_the_measured_ones_are_used(tmp_path):
    camera = CameraTruth()
    biases(tmp_path, camera)
    flats(tmp_path, camera, [15000.0] * 6, [3.0] * 6)
    made = masters_of(tmp_path)
    image = calibrate(camera.adu(10.0, 60.0, 3).astype(np.float32), light(), choose_masters(light(), made), SATURATED)
    assert image.gain_e_per_adu == pytest.approx(camera.gain, rel=0.02)
    assert image.read_noise_e == pytest.approx(camera.read_noise_e, rel=0.03)
    with pytest.raises(FrameError, match="gain is not known"):
        calibrate(np.ones((NY, NX), np.float32), light(), ChosenMasters(), SATURATED)


@pytest.mark.parametrize(("bits", "step"), [(12, 16), (14, 4), (16, 1)])
def test_few_bits_stored_as_sixteen(bits, step):
    camera = CameraTruth(gain=1.5 / 16)
    raw = camera.adu(2.0, 10.0, 4)
    raw[40:43, 50] = 65535
    stored = (raw // step * step).astype(np.float32)
    assert converter_step_adu(stored) == step
    settings = Settings(camera=Camera(gain_e_per_adu=camera.gain, read_noise_e=1.0, saturation_adu=65535))
    assert saturation_level(light(), settings, stored)[0] == 65536 - step
    image = calibrate(stored, light(), ChosenMasters(), settings)
    assert np.argwhere(image.mask & PixelFlag.SATURATED).tolist() == [[40, 50], [41, 50], [42, 50]]
    assert np.median(image.variance_e2) == pytest.approx(1.0 + (camera.gain * step) ** 2 / 12.0, rel=0.01)
    lower = Settings(camera=Camera(gain_e_per_adu=1.0, read_noise_e=1.0, saturation_adu=30000))
    assert saturation_level(light(), lower, stored)[0] == 30000


def test_a_frame_of_one_value_has_no_step():
    assert converter_step_adu(np.full((50, 50), 1600.0, np.float32)) == 1.0
    assert converter_step_adu(np.full((50, 50), np.nan, np.float32)) == 1.0


def test_a_pedestal_is_taken_off_instead_of_bias_and_dark(tmp_path):
    camera = CameraTruth(bias_adu=1000.0)
    biases(tmp_path, camera)
    made = masters_of(tmp_path)
    freed = camera.adu(10.0, 60.0, 3).astype(float) - camera.bias_adu - camera.columns + 100.0
    path = write(tmp_path / "light.fits", np.rint(freed).astype(np.int16), PEDESTAL=-100)
    frame = open_frame(path, SATURATED)
    assert frame.info.pedestal_adu == 100.0
    assert "pedestal of 100 ADU" in " ".join(frame.info.notes)
    chosen = choose_masters(frame.info, made)
    assert (chosen.bias, chosen.dark) == (None, None)
    settings = Settings(camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, dark_e_per_s=0.2))
    image = calibrate(frame.read(), frame.info, chosen, settings)
    truth = 10.0 * 60.0 * camera.flat + 0.2 * 60.0
    assert np.mean(image.data_e - truth) == pytest.approx(0.0, abs=0.5)
    none = write(tmp_path / "b.fits", np.ones((9, 9), np.int16), PEDESTAL=0)
    assert open_frame(none, SATURATED).info.pedestal_adu is None


def calibrated(camera: CameraTruth, made: list[Master], rate: float, exposure_s: float, seed: int) -> CalibratedImage:
    info = light(exposure_s)
    settings = Settings(camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535, dark_e_per_s=0.2))
    return calibrate(camera.adu(rate, exposure_s, seed).astype(np.float32), info, choose_masters(info, made), settings)


def test_photon_noise_is_right_in_vignetted_corners(tmp_path):
    camera = CameraTruth(flat=vignetting((NY, NX), 0.7))
    biases(tmp_path, camera, 30)
    flats(tmp_path, camera, [15000.0] * 16, [3.0] * 16)
    made = masters_of(tmp_path)
    images = [calibrated(camera, made, 50.0, 60.0, 700 + k) for k in range(16)]
    sky = 50.0 * 60.0
    data = np.array([image.data_e for image in images])
    one = images[0]
    assert one.sensitivity is not None
    stated = one.variance_e2 + sky / one.sensitivity
    measured = data.var(axis=0, ddof=1)
    for at in (np.s_[:25, :25], np.s_[-25:, -25:], np.s_[80:110, 110:140]):
        good = one.mask[at] == 0
        assert np.mean(measured[at][good]) / np.mean(stated[at][good]) == pytest.approx(1.0, abs=0.04)
    corner = one.sensitivity[:25, :25].mean()
    assert corner < 0.6  # without the division the noise there would be too small by this much


@pytest.fixture(scope="module")
def shuttered(tmp_path_factory: pytest.TempPathFactory) -> tuple[CameraTruth, list[Master]]:
    """An iris shutter: the middle is open 60 ms longer than the corners."""
    folder = tmp_path_factory.mktemp("shutter")
    y, x = np.indices((NY, NX))
    r2 = ((x - NX / 2) / (NX / 2)) ** 2 + ((y - NY / 2) / (NY / 2)) ** 2
    camera = CameraTruth(shutter_s=0.06 * (1.0 - r2 / 2.0))
    biases(folder, camera)
    # twilight: whatever the level does, the shape tells
    flats(folder, camera, [40000.0, 38000.0, 36000.0, 34000.0, 1700.0, 1600.0, 1500.0, 1450.0], [1.0] * 4 + [20.0] * 4)
    return camera, masters_of(folder)


def test_the_shutter_map_is_found_and_applied_to_short_exposures(shuttered):
    camera, made = shuttered
    shutter = shutter_of(made)
    assert "differs by" in " ".join(shutter.notes)
    images = [calibrated(camera, made, 8000.0, 1.0, 80 + k) for k in range(8)]
    data = np.mean([image.data_e for image in images], axis=0)
    corner, middle = data[:30, :30].mean(), data[81:111, 113:143].mean()
    assert corner / middle == pytest.approx(1.0, abs=0.004)  # 1.06 at the middle without the map
    info = light(1.0)
    without = replace(choose_masters(info, made), shutter=None)
    settings = Settings(camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535))
    raw = calibrate(camera.adu(8000.0, 1.0, 80).astype(np.float32), info, without, settings).data_e
    assert abs(raw[:30, :30].mean() / raw[81:111, 113:143].mean() - 1.0) > 0.01


def test_long_exposures_need_no_shutter_map(shuttered):
    _, made = shuttered
    assert choose_masters(light(60.0), made).shutter is None
    assert choose_masters(light(10.0), made).shutter is shutter_of(made)
    flats_only = [master for master in made if master.kind != "shutter"]
    assert "exposed for 1 s only" in " ".join(choose_masters(light(1.0), flats_only).notes)


def test_a_shutter_without_time_of_its_own_gives_an_empty_map(tmp_path):
    camera = CameraTruth()
    biases(tmp_path, camera)
    flats(tmp_path, camera, [40000.0, 38000.0, 36000.0, 1700.0, 1600.0, 1500.0], [1.0] * 3 + [20.0] * 3)
    shutter = shutter_of(masters_of(tmp_path))
    assert "no shutter time is seen" in " ".join(shutter.notes)
    image = calibrated(camera, [shutter], 1000.0, 1.0, 3)
    assert np.isfinite(image.data_e).all()


# ---- darks -----------------------------------------------------------------------------------------------


def darks(folder: Path, exposure_s: float, glow_adu: float, n: int = 9) -> None:
    """Darks with a glow in one corner that does, or does not, grow with time."""
    camera = CameraTruth()
    y, x = np.indices((NY, NX))
    glow = glow_adu * np.exp(-((x / 60.0) ** 2 + (y / 60.0) ** 2))
    for k in range(n):
        raw = camera.adu(0.0, exposure_s, int(exposure_s) * 10 + k) + np.rint(glow)
        write(folder / f"dark{exposure_s:g}-{k}.fits", raw.astype(np.uint16), IMAGETYP="dark", EXPTIME=exposure_s)


@pytest.mark.parametrize(
    ("glows", "scaled"),
    [
        ({120.0: 0.0}, True),  # nothing there
        ({120.0: 80.0}, False),  # one dark cannot show that it scales
        ({120.0: 80.0, 240.0: 160.0}, True),  # two show that it does
        ({120.0: 80.0, 240.0: 80.0}, False),  # or that it does not
    ],
)
def test_a_dark_with_the_glow_of_an_amplifier_is_scaled_only_where_it_grows_with_time(tmp_path, glows, scaled):
    camera = CameraTruth()
    biases(tmp_path, camera)
    for exposure_s, glow_adu in glows.items():
        darks(tmp_path, exposure_s, glow_adu)
    made = masters_of(tmp_path)
    image = calibrated(camera, made, 0.0, 60.0, 4)
    said_of_it = [note for note in image.notes if "glow of an amplifier" in note]
    assert bool(said_of_it) is not scaled
    # A light of a dark's own exposure takes it as it is.
    assert not [note for note in calibrated(camera, made, 0.0, 120.0, 4).notes if "glow" in note]
    if not scaled:
        # the glow of the dark is not stamped into the frame, which has none here
        assert image.data_e[:40, :40].mean() == pytest.approx(image.data_e[-40:, -40:].mean(), abs=1.5)


# ---- stars in flats --------------------------------------------------------------------------------------


def twilight(folder: Path, n_stars: int, n: int = 6) -> CameraTruth:
    """Flats in a fading sky, moved between exposures, with stars of constant light."""
    camera = CameraTruth()
    biases(folder, camera)
    rng = np.random.default_rng(12)
    at_x, at_y, light = rng.uniform(0, NX, n_stars), rng.uniform(0, NY, n_stars), rng.uniform(500.0, 9000.0, n_stars)
    y, x = np.indices((NY, NX))
    for k in range(n):
        sky = np.full((NY, NX), 16000.0 * 0.9**k)
        for sx, sy, peak in zip(at_x + 9.0 * k, at_y - 7.0 * k, light, strict=True):
            sky += peak * np.exp(-((x - sx % NX) ** 2 + (y - sy % NY) ** 2) / (2.0 * 1.8**2))
        write(
            folder / f"flat{k}.fits", camera.adu(sky, 3.0, 60 + k), IMAGETYP="flat", EXPTIME=3.0,
            **{"DATE-OBS": f"2024-03-10T18:{10 + k:02d}:00"},
        )  # fmt: skip
    return camera


def test_stars_do_not_stay_in_a_flat(tmp_path):
    camera = twilight(tmp_path, 6)
    made = flat_of(masters_of(tmp_path))
    off = read_master(made.path) / camera.flat - 1.0
    assert made.n_inputs == 6
    smooth = off[: NY // 4 * 4, : NX // 4 * 4].reshape(NY // 4, 4, NX // 4, 4).mean(axis=(1, 3))
    noise = 1.0 / np.sqrt(16 * 6 * 36000.0)
    assert np.abs(smooth).max() < 0.005  # a star of 9000 e-/s left whole in one flat of six would be 0.06
    assert smooth.std() < 4.0 * noise


def test_flats_full_of_stars_are_refused(tmp_path):
    twilight(tmp_path, 150)
    with pytest.raises(FrameError, match="show stars; take them in brighter twilight"):
        masters_of(tmp_path)


# ---- subframes and seasons -------------------------------------------------------------------------------


def test_a_subframe_is_served_by_the_masters_of_the_whole_detector(tmp_path):
    camera = CameraTruth()
    whole = {"XORGSUBF": 0, "YORGSUBF": 0}
    for k in range(6):
        write(tmp_path / f"bias{k}.fits", camera.adu(0.0, 0.0, k), IMAGETYP="bias", EXPTIME=0.0, **whole)
        write(tmp_path / f"flat{k}.fits", camera.adu(15000.0, 3.0, 20 + k), IMAGETYP="flat", EXPTIME=3.0, **whole)
    made = masters_of(tmp_path)
    raw = camera.adu(50.0, 60.0, 3)
    x0, y0, nx, ny = 30, 20, 100, 80
    part = write(tmp_path / "part.fits", raw[y0 : y0 + ny, x0 : x0 + nx], XORGSUBF=x0, YORGSUBF=y0)
    settings = Settings(camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535))
    frame, full = open_frame(part, settings), light(window=(0, 0))
    small = calibrate(frame.read(), frame.info, choose_masters(frame.info, made), settings)
    big = calibrate(raw.astype(np.float32), full, choose_masters(full, made), settings)
    np.testing.assert_allclose(small.data_e, big.data_e[y0 : y0 + ny, x0 : x0 + nx], rtol=1e-6)
    for other in ((NX - 50, 20), None):
        chosen = choose_masters(replace(frame.info, window=other), made)
        assert (chosen.bias, chosen.flat) == (None, None)
    binned = choose_masters(replace(frame.info, binning=(2, 2)), made)
    assert "those there are have binning 1×1" in " ".join(binned.notes)
    strip = choose_masters(replace(full, overscan=True), made)
    assert "those there are have no overscan" in " ".join(strip.notes)


def season(*nights: tuple[float, int]) -> list[tuple[str, Path, FrameInfo]]:
    """Flats of many nights: (MJD of the first, number); a minute apart."""
    info = light(3.0, kind="flat")
    return [
        (f"{mjd:.3f}-{k}", Path("x"), replace(info, mjd_mid=mjd + k / 1440.0)) for mjd, n in nights for k in range(n)
    ]


def sizes(*nights: tuple[float, int], longitude_deg: float = 0.0) -> list[int]:
    plans = plan_masters(season(*nights), longitude_deg)
    return [len(plan.inputs) for plan in sorted(plans, key=lambda plan: plan.mjd or 0.0)]


def test_a_night_with_enough_flats_makes_a_master_of_its_own():
    assert sizes((60000.8, 7), (60001.8, 7)) == [7, 7]
    assert sizes((60000.8, 3), (60001.8, 3), (60009.8, 3)) == [6, 3]  # few join the next night's
    assert sizes((60000.8, 5), (60001.2, 5)) == [10]  # evening and morning of one night
    # At 105° west the night of 60000 lies about 07 h UT
    assert sizes((60001.07, 5), (60001.52, 5), longitude_deg=-105.0) == [10]
    assert sizes((60001.07, 5), (60001.52, 5)) == [5, 5]


def test_later_flats_leave_the_masters_of_earlier_nights_alone():
    before = plan_masters(season((60000.8, 7), (60003.8, 6)))
    after = plan_masters(season((60000.8, 7), (60003.8, 6), (60009.8, 8)))
    digests = [plan.digest([]) for plan in before]
    assert [plan.digest([]) for plan in after if plan.digest([]) in digests] == digests


def test_the_flat_of_the_nearest_night_is_chosen():
    info = light(3.0, kind="flat")
    signature = plan_masters(season((60000.8, 5)))[0].signature
    blank = Master("flat", "", Path("x"), signature, "V", "V", 3.0, None, (), 7, 1e-3, 1e-3)
    first, second = replace(blank, digest="a", mjd=60000.8), replace(blank, digest="b", mjd=60010.8)
    few = replace(blank, digest="c", mjd=60005.0, n_inputs=2)
    assert info.camera == "cam"
    for masters in ([first, second, few], [few, second, first]):
        assert choose_masters(light(mjd_mid=60001.0), masters).flat is first
        assert choose_masters(light(mjd_mid=60005.0), masters).flat is first
        assert choose_masters(light(mjd_mid=60006.5), masters).flat is second
        assert choose_masters(light(mjd_mid=60400.0), masters).flat is second
    assert choose_masters(light(mjd_mid=60400.0), [few]).flat is few


# ---- fringes ---------------------------------------------------------------------------------------------

FRINGED = Settings(
    camera=Camera(gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535, dark_e_per_s=0.2, fringe_bands=("I",))
)


def fringes() -> np.ndarray:
    """2 % of the sky, some 25 pixels wide."""
    y, x = np.indices((NY, NX))
    return 0.02 * np.sin(2.0 * np.pi * (x + 12.0 * np.sin(y / 30.0)) / 25.0)


def test_fringes_are_found_in_several_pointings_and_taken_off(tmp_path):
    camera = CameraTruth()
    biases(tmp_path, camera, 20)
    for k in range(16):
        write(
            tmp_path / f"flat{k:02d}.fits", camera.adu(15000.0, 3.0, 20 + k), IMAGETYP="flat", EXPTIME=3.0, FILTER="I"
        )
    y, x = np.indices((NY, NX))
    rng = np.random.default_rng(9)
    for k in range(12):
        sky = (80.0 + 5.0 * k) * (1.0 + fringes())
        for sx, sy, peak in zip(rng.uniform(0, NX, 8), rng.uniform(0, NY, 8), rng.uniform(20, 400, 8), strict=True):
            sky += peak * np.exp(-((x - sx) ** 2 + (y - sy) ** 2) / (2.0 * 1.8**2))
        write(
            tmp_path / f"light{k:02d}.fits", camera.adu(sky, 60.0, 500 + k), FILTER="I",
            RA_DEG=15.0 * (k % 4), DEC_DEG=10.0, **{"DATE-OBS": f"2024-03-10T21:{10 + k:02d}:00"},
        )  # fmt: skip
    rows = [(frame_id(path), path, open_frame(path, FRINGED).info) for path in sorted(tmp_path.glob("*.fits"))]
    assert not [plan for plan in plan_masters(rows) if plan.kind == "fringe"]  # off unless asked for
    made: list[Master] = []
    for plan in plan_masters(rows, 0.0, ("I",)):
        made.append(build_master(plan, made, tmp_path / "masters", FRINGED))
    (pattern,) = [master for master in made if master.kind == "fringe"]
    assert pattern.n_inputs == 9
    found = read_master(pattern.path)
    assert np.corrcoef(found.ravel(), fringes().ravel())[0, 1] > 0.97

    info = light(60.0, band="I", filter_name="I")
    sky = 100.0 * (1.0 + fringes())
    adu = camera.adu(sky, 60.0, 900).astype(np.float32)
    image = calibrate(adu, info, choose_masters(info, made), FRINGED)
    assert any("fringes of" in note for note in image.notes)
    wave = fringes() - fringes().mean()
    left = np.sum(image.data_e * wave) / np.sum(wave**2)
    assert abs(left) < 0.05 * 6000.0  # 6000 e- without the pattern
    # A band that has none, and a night without four pointings
    assert choose_masters(light(), made).fringe is None
    one_field = [(id_, path, replace(info_, ra_deg=0.0, dec_deg=0.0)) for id_, path, info_ in rows]
    assert not [plan for plan in plan_masters(one_field, 0.0, ("I",)) if plan.kind == "fringe"]


def test_a_sky_without_fringes_gives_an_empty_pattern():
    notes: list[str] = []
    noise = np.random.default_rng(1).normal(0.0, 0.01, (NY, NX)).astype(np.float32)
    assert not finished(noise, 0.01, notes).any()
    assert notes == ["the sky of this band shows no fringes."]
