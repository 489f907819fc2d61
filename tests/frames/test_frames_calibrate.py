"""Simulated raw frames must come out in true electrons, with the noise that the variance states."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from frame_files import write

from reduce.frames.calibrate import calibrate
from reduce.frames.master_plans import plan_masters
from reduce.frames.master_sets import ChosenMasters, Master, choose_masters
from reduce.frames.masters import build_master
from reduce.frames.reader import frame_id, open_frame
from reduce.records import CalibratedImage, FrameError, FrameInfo, PixelFlag
from reduce.settings import Camera, Settings

GAIN, READ_NOISE_E, BIAS_ADU, DARK_E_PER_S, NY, NX = 1.5, 8.0, 1000.0, 0.3, 200, 220
HOT, DEAD = (50, 60), (20, 30)
SETTINGS = Settings(camera=Camera(gain_e_per_adu=GAIN, read_noise_e=READ_NOISE_E, saturation_adu=65535))
COLUMNS = np.random.default_rng(1).normal(0.0, 1.5, NX)[None, :]


def response() -> np.ndarray:
    y, x = np.indices((NY, NX))
    flat = 1.0 - 0.45 * (((x - NX / 2) / NX) ** 2 + ((y - NY / 2) / NY) ** 2) * 2
    flat = flat / np.median(flat)
    flat[DEAD] = 0.05
    return flat


def dark_rate() -> np.ndarray:
    rate = np.full((NY, NX), DARK_E_PER_S)
    rate[HOT] = 20.0
    return rate


def camera(light_e: float, exposure_s: float, seed: int) -> np.ndarray:
    """An independent detector: Poisson light and dark, Gaussian read noise, gain, bias, rounding."""
    rng = np.random.default_rng(seed)
    electrons = rng.poisson(light_e * response() + dark_rate() * exposure_s) + rng.normal(0, READ_NOISE_E, (NY, NX))
    return np.clip(np.rint(electrons / GAIN + BIAS_ADU + COLUMNS), 0, 65535).astype(np.uint16)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> list[Master]:
    folder = tmp_path_factory.mktemp("night")
    for k in range(20):
        write(folder / f"bias{k}.fits", camera(0, 0, k), IMAGETYP="bias", EXPTIME=0.0)
        write(folder / f"dark{k}.fits", camera(0, 120.0, 50 + k), IMAGETYP="dark", EXPTIME=120.0)
        write(folder / f"flat{k}.fits", camera(40000, 2.0, 100 + k), IMAGETYP="flat", EXPTIME=2.0)
    rows = [(frame_id(path), path, open_frame(path, SETTINGS).info) for path in sorted(folder.glob("*.fits"))]
    masters: list[Master] = []
    for plan in plan_masters(rows):
        masters.append(build_master(plan, masters, folder / "masters", SETTINGS))
    return masters


@pytest.mark.parametrize("top_adu", [4095, 16383, 20000])
def test_a_converter_of_few_bits_shows_its_top_where_nobody_states_it(tmp_path: Path, top_adu: int) -> None:
    adu = np.minimum(camera(300, 60.0, 7), 3000)
    adu[90:93, 100:102] = top_adu
    info = open_frame(write(tmp_path / "light.fits", adu), Settings()).info
    settings = Settings(camera=Camera(gain_e_per_adu=GAIN, read_noise_e=READ_NOISE_E))
    image = calibrate(adu.astype(np.float32), info, ChosenMasters(), settings)
    assert np.argwhere(image.mask & PixelFlag.SATURATED).tolist() == [[y, x] for y in (90, 91, 92) for x in (100, 101)]
    assert any(f"{top_adu} ADU was taken" in note for note in image.notes)


def test_a_bright_star_below_the_top_is_not_called_saturated(tmp_path: Path) -> None:
    adu = np.minimum(camera(300, 60.0, 7), 3000)
    adu[90, 100:103] = 20000, 20001, 20001
    info = open_frame(write(tmp_path / "light.fits", adu), Settings()).info
    settings = Settings(camera=Camera(gain_e_per_adu=GAIN, read_noise_e=READ_NOISE_E))
    image = calibrate(adu.astype(np.float32), info, ChosenMasters(), settings)
    assert not (image.mask & PixelFlag.SATURATED).any()
    assert any("65535 ADU was assumed" in note for note in image.notes)


def light(exposure_s: float = 120.0, **changes: object) -> FrameInfo:
    return replace(
        FrameInfo(
            kind="light", band="V", filter_name="V", object_name="", camera="cam", mjd_mid=60000.0,
            exposure_s=exposure_s, ra_deg=None, dec_deg=None, scale_arcsec=None, gain_e_per_adu=None,
            read_noise_e=None, saturation_adu=None, nx=NX, ny=NY,
        ),
        **changes,
    )  # fmt: skip


def calibrated(made: list[Master], light_e: float, exposure_s: float, seed: int) -> CalibratedImage:
    info = light(exposure_s)
    adu = camera(light_e, exposure_s, seed).astype(np.float32)
    return calibrate(adu, info, choose_masters(info, made), SETTINGS)


@pytest.mark.parametrize(
    ("exposure_s", "kinds"),
    [(120.0, "bias dark flat"), (60.0, "bias dark flat"), (240.0, "bias dark flat"), (120.0, "dark flat"),
     (120.0, "bias flat"), (120.0, "bias dark"), (120.0, "bias")],
)  # fmt: skip
@pytest.mark.parametrize("light_e", [0.0, 400.0])
def test_signal_is_right_and_the_noise_is_the_stated_one(made, exposure_s, kinds, light_e):
    some = [master for master in made if master.kind in kinds.split()]
    settings = SETTINGS.model_copy(update={"camera": SETTINGS.camera.model_copy(update={"dark_e_per_s": DARK_E_PER_S})})
    info = light(exposure_s)
    images = [
        calibrate(camera(light_e, exposure_s, seed).astype(np.float32), info, choose_masters(info, some), settings)
        for seed in range(900, 925)
    ]
    good = images[0].mask == 0
    good[HOT] = good[DEAD] = False
    data = np.array([image.data_e for image in images])
    image = images[0]

    flat = response() if "flat" in kinds else np.ones((NY, NX))
    left_dark = 0.0 if "dark" in kinds else DARK_E_PER_S * exposure_s
    truth = (light_e * response() + left_dark) / flat
    assert np.mean((data.mean(0) - truth)[good]) == pytest.approx(0.0, abs=0.5)

    # About the truth, of all frames and pixels. The record leaves out the photon noise of what the frame holds and
    # the flat's, so both are added from the truth.
    expected = image.variance_e2 + light_e * response() / flat**2 + (light_e * image.relative_flat_error) ** 2
    about = data - truth
    measured = np.mean((about**2)[:, good], axis=0)
    assert np.mean(measured) == pytest.approx(np.mean(expected[good]), rel=0.02)
    # also in the vignetted corner alone, where dividing by the flat makes the noise larger
    corner = np.zeros_like(good)
    corner[:60, :60] = good[:60, :60]
    assert np.mean((about**2)[:, corner]) == pytest.approx(np.mean(expected[corner]), rel=0.02)


def test_masks(made):
    adu = camera(400, 120.0, 5).astype(np.float32)
    adu[3, 4], adu[5, 6], adu[7, 8] = 65535, np.nan, 65534
    image = calibrate(adu, light(), choose_masters(light(), made), SETTINGS)
    assert image.mask[3, 4] == PixelFlag.SATURATED
    assert image.mask[5, 6] == PixelFlag.NOT_FINITE
    assert image.mask[7, 8] == 0
    assert image.mask[HOT] == PixelFlag.BAD
    assert image.mask[DEAD] == PixelFlag.BAD
    assert (image.mask != 0).sum() == 4
    assert image.mask.dtype == np.uint8
    assert image.data_e.dtype == image.variance_e2.dtype == np.float32
    assert np.isfinite(image.variance_e2).all()
    assert image.saturation_e == pytest.approx((65535 - BIAS_ADU) * GAIN - DARK_E_PER_S * 120, abs=5)


def test_a_hot_pixel_has_the_noise_of_its_own_dark(made):
    variance = calibrated(made, 0.0, 120.0, 5).variance_e2 * response() ** 2  # as it was before the flat
    assert variance[HOT] - np.median(variance) == pytest.approx((20 - DARK_E_PER_S) * 120, rel=0.05)


def test_a_cold_detector_adds_no_dark_noise(made):
    # A dark without signal: bias and dark masters differ by noise only, which must not be taken for dark current
    bias, dark = made[0], replace(made[0], kind="dark", path=made[1].path, exposure_s=120.0)
    cold = made[1].path.with_name("cold.fits")
    stack = [camera(0, 0, 700 + k).astype(np.float32) for k in range(20)]
    write(cold, np.mean(stack, axis=0, dtype=np.float64).astype(np.float32))
    chosen = ChosenMasters(bias=bias, dark=replace(dark, path=cold))
    image = calibrate(camera(0, 120.0, 5).astype(np.float32), light(), chosen, SETTINGS)
    masters = (bias.noise * GAIN) ** 2
    assert np.mean(image.variance_e2) == pytest.approx(READ_NOISE_E**2 + GAIN**2 / 12 + masters, abs=0.3)


def test_the_header_wins_over_the_settings(made):
    info = light(gain_e_per_adu=3.0, read_noise_e=12.0, saturation_adu=50000.0)
    image = calibrate(camera(400, 120.0, 5).astype(np.float32), info, ChosenMasters(), SETTINGS)
    assert (image.gain_e_per_adu, image.read_noise_e) == (3.0, 12.0)
    assert image.saturation_e == 150000.0


@pytest.mark.parametrize(
    ("camera_settings", "words"),
    [
        ({"read_noise_e": 8.0}, "gain is not known; write gain_e_per_adu"),
        ({"gain_e_per_adu": 1.0}, "read noise is not"),
    ],
)
def test_what_nobody_states_is_refused(camera_settings, words):
    with pytest.raises(FrameError, match=words):
        calibrate(np.ones((NY, NX), np.float32), light(), ChosenMasters(), Settings(camera=Camera(**camera_settings)))


def test_what_is_missing_is_said():
    settings = Settings(camera=Camera(gain_e_per_adu=1.0, read_noise_e=8.0))
    image = calibrate(np.full((NY, NX), 1200, np.float32), light(), choose_masters(light(), []), settings)
    said = " ".join(image.notes)
    for words in (
        "no bias frames",
        "no dark frames",
        "no flats in V",
        "neither bias nor dark",
        "65535",
        "dark current",
    ):
        assert words in said
    assert not image.flat_used
    assert np.all(image.data_e == 1200)


def test_the_raw_image_is_left_alone(made):
    adu = camera(400, 120.0, 5).astype(np.float32)
    before = adu.copy()
    calibrate(adu, light(), choose_masters(light(), made), SETTINGS)
    np.testing.assert_array_equal(adu, before)


def test_a_master_that_is_gone_is_one_sentence(made):
    gone = replace(made[0], path=Path("/nowhere/bias.fits"))
    with pytest.raises(FrameError, match=r"bias\.fits cannot be read; reduce again"):
        calibrate(np.ones((NY, NX), np.float32), light(), ChosenMasters(bias=gone), SETTINGS)


def test_the_same_twice_is_bit_equal(made):
    first, second = (calibrated(made, 400.0, 60.0, 7) for _ in range(2))
    assert first.data_e.tobytes() == second.data_e.tobytes()
    assert first.variance_e2.tobytes() == second.variance_e2.tobytes()
