"""Which calibration frames belong together, what a master holds, and which master suits a light."""

from __future__ import annotations

import hashlib
import os
import random
import subprocess
import sys
import tracemalloc
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from frame_files import SETTINGS, write

from reduce.frames import masters as building
from reduce.frames.combine import combine, typical_sigma
from reduce.frames.master_pixels import read_master
from reduce.frames.master_plans import plan_masters
from reduce.frames.master_sets import ChosenMasters, Master, choose_masters
from reduce.frames.masters import build_master
from reduce.frames.reader import frame_id, open_frame
from reduce.records import FrameError, FrameInfo
from reduce.settings import Settings

NY, NX = 60, 80
BIAS_ADU, DARK_ADU_PER_S, NOISE_ADU = 1000.0, 0.5, 5.0


def pattern(seed: int) -> np.ndarray:
    return np.random.default_rng(seed).normal(0.0, 3.0, (NY, NX))


def raw(level: np.ndarray | float, seed: int) -> np.ndarray:
    noisy = np.random.default_rng(seed).normal(level, NOISE_ADU, (NY, NX))
    return np.clip(np.rint(noisy), 0, 65535).astype(np.uint16)


def make_bias(folder: Path, n: int = 10, **cards: object) -> None:
    for k in range(n):
        write(folder / f"bias{k}.fits", raw(BIAS_ADU + pattern(9), 100 + k), IMAGETYP="bias", EXPTIME=0.0, **cards)


def make_darks(folder: Path, exposure_s: float, n: int = 9, **cards: object) -> None:
    for k in range(n):
        level = BIAS_ADU + pattern(9) + DARK_ADU_PER_S * exposure_s
        name = f"dark{exposure_s:g}-{k}.fits"
        write(folder / name, raw(level, int(exposure_s) + 200 + k), IMAGETYP="dark", EXPTIME=exposure_s, **cards)


def response() -> np.ndarray:
    return 1.0 + 0.1 * np.sin(np.arange(NX) / 9.0) + pattern(8) / 300.0


def make_flats(folder: Path, band: str = "V", levels: tuple[float, ...] = (20000, 25000, 22000, 30000, 27000)) -> None:
    for k, level in enumerate(levels):
        image = np.random.default_rng(300 + k).poisson(level * response() * 1.5) / 1.5 + BIAS_ADU + pattern(9)
        write(folder / f"flat{band}{k}.fits", raw(image, 400 + k), IMAGETYP="flat", EXPTIME=2.0, FILTER=band)


def rows(folder: Path) -> list[tuple[str, Path, FrameInfo]]:
    return [(frame_id(path), path, open_frame(path, SETTINGS).info) for path in sorted(folder.glob("*.fits"))]


def build_all(folder: Path, out: Path) -> list[Master]:
    made: list[Master] = []
    for plan in plan_masters(rows(folder)):
        made.append(build_master(plan, made, out, SETTINGS))
    return made


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("night")
    make_bias(folder)
    make_darks(folder, 120.0)
    make_darks(folder, 30.0)
    make_flats(folder)
    return folder


@pytest.fixture(scope="module")
def made(night: Path, tmp_path_factory: pytest.TempPathFactory) -> list[Master]:
    return build_all(night, tmp_path_factory.mktemp("masters"))


# ---- plan ------------------------------------------------------------------------------------------------

INFO = FrameInfo(
    kind="bias", band=None, filter_name="", object_name="", camera="cam", mjd_mid=60000.0, exposure_s=0.0, ra_deg=None,
    dec_deg=None, scale_arcsec=None, gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=None, nx=10, ny=10,
    temperature_c=-20.0,
)  # fmt: skip


def plan_of(*infos: FrameInfo) -> list[int]:
    plans = plan_masters([(f"{k:02d}", Path(f"{k}.fits"), info) for k, info in enumerate(infos)])
    return sorted(len(plan.inputs) for plan in plans)


@pytest.mark.parametrize(
    "change",
    [{"camera": "b"}, {"nx": 11}, {"binning": (2, 2)}, {"gain_e_per_adu": 2.0}, {"temperature_c": -15.0},
     {"temperature_c": None}, {"kind": "dark"}],
)  # fmt: skip
def test_frames_that_differ_make_masters_of_their_own(change):
    assert plan_of(INFO, INFO, replace(INFO, **change)) == [1, 2]


def test_frames_that_agree_make_one():
    assert plan_of(INFO, replace(INFO, temperature_c=-18.5), replace(INFO, mjd_mid=60001.0)) == [3]
    dark = replace(INFO, kind="dark", exposure_s=60.0)
    assert plan_of(dark, replace(dark, exposure_s=60.001), replace(dark, exposure_s=61.0)) == [1, 2]
    flat = replace(INFO, kind="flat", band="V", filter_name="V", exposure_s=2.0)
    assert plan_of(flat, replace(flat, exposure_s=3.0, temperature_c=5.0), replace(flat, band="B")) == [1, 2]
    assert plan_of(replace(flat, band=None, filter_name="Ha"), replace(flat, band=None, filter_name="OIII")) == [1, 1]


def test_lights_and_copies_are_left_out():
    assert plan_of(replace(INFO, kind="light"), replace(INFO, kind="unknown")) == []
    plans = plan_masters(
        [("a", Path("1.fits"), INFO), ("a", Path("copy of 1.fits"), INFO), ("b", Path("2.fits"), INFO)]
    )
    assert [frame.id for frame in plans[0].inputs] == ["a", "b"]


def test_plans_do_not_depend_on_the_order(night):
    frames = rows(night)
    expected = plan_masters(frames)
    assert [plan.kind for plan in expected] == ["bias", "dark", "dark", "flat"]
    assert len({plan.label for plan in expected}) == len(expected)
    random.Random(4).shuffle(frames)
    assert plan_masters(frames) == expected


# ---- build -----------------------------------------------------------------------------------------------


def test_masters_hold_what_was_put_in(made):
    bias, dark120, dark30, flat = (read_master(master.path) for master in made)
    assert [master.kind for master in made] == ["bias", "dark", "dark", "flat"]
    assert np.std(bias - BIAS_ADU - pattern(9)) == pytest.approx(NOISE_ADU / np.sqrt(10), rel=0.05)
    assert np.mean(dark120 - bias) == pytest.approx(DARK_ADU_PER_S * 120, abs=0.1)
    assert np.mean(dark30 - bias) == pytest.approx(DARK_ADU_PER_S * 30, abs=0.1)
    expected = response() / np.median(response())
    assert np.std(flat / expected) == pytest.approx(made[3].noise, rel=0.1)
    assert np.median(flat) == pytest.approx(1.0, abs=1e-6)


def test_the_stated_noise_is_the_real_one(made):
    # 10 biases: rounding adds 1/12 ADU2; medians of chi2 over 4,800 pixels are good to about 1 %
    single = np.sqrt(NOISE_ADU**2 + 1 / 12)
    assert made[0].single_noise == pytest.approx(single, rel=0.03)
    assert made[0].noise == pytest.approx(single / np.sqrt(10), rel=0.03)
    photons = np.mean([1 / np.sqrt(level * 1.5) for level in (20000, 25000, 22000, 30000, 27000)])
    assert made[3].noise == pytest.approx(photons / np.sqrt(5), rel=0.05)


def test_bytes_are_the_same_whoever_builds(night, made, tmp_path):
    def digests(folder: Path) -> list[str]:
        return [hashlib.sha256(path.read_bytes()).hexdigest() for path in sorted(folder.glob("*.fits"))]

    code = (
        "import sys; from pathlib import Path; sys.path[:0] = sys.argv[3:]\n"
        "import test_frames_masters as t; t.build_all(Path(sys.argv[1]), Path(sys.argv[2]))"
    )
    here = str(Path(__file__).parent)
    environment = {**os.environ, "PYTHONHASHSEED": "77", "OPENBLAS_NUM_THREADS": "2"}
    subprocess.run([sys.executable, "-c", code, str(night), str(tmp_path), here], check=True, env=environment)
    assert digests(tmp_path) == digests(made[0].path.parent)
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(m.path.name for m in made)


def test_a_master_that_stands_is_not_built_again(night, made, monkeypatch):
    monkeypatch.setattr(building, "combine", lambda stack: pytest.fail("built again"))
    assert build_all(night, made[0].path.parent) == made


def test_a_damaged_master_is_built_again(night, tmp_path):
    first = build_all(night, tmp_path)
    content = first[0].path.read_bytes()
    first[0].path.write_bytes(content[:5000])
    assert build_all(night, tmp_path) == first
    assert first[0].path.read_bytes() == content


def test_a_new_bias_changes_the_flat(night, made, tmp_path):
    frames = [row for row in rows(night) if row[1].name != "bias0.fits"]
    again: list[Master] = []
    for plan in plan_masters(frames):
        again.append(build_master(plan, again, tmp_path, SETTINGS))
    assert again[0].digest != made[0].digest
    assert again[1].digest == made[1].digest
    assert again[3].digest != made[3].digest


def test_flats_of_a_useless_level_are_left_out_or_refused(tmp_path):
    make_bias(tmp_path)
    make_flats(tmp_path, levels=(20000, 25000, 60000, 1000, 24000))
    flat = build_all(tmp_path, tmp_path / "m")[1]
    assert flat.n_inputs == 3
    assert flat.notes == ("2 of 5 flats were left out for their level.",)
    make_flats(tmp_path, levels=(60000, 61000, 1000, 58000, 2000))
    with pytest.raises(FrameError, match=r"all 5 flats are at 2–9\d % of the linear range, outside 10–80 %; take"):
        build_all(tmp_path, tmp_path / "m")


def test_where_no_saturation_is_stated_flats_of_a_converter_of_few_bits_are_taken(tmp_path):
    make_bias(tmp_path)
    make_flats(tmp_path, levels=(1500, 2500, 3000, 2800, 2700))
    bare = Settings(camera=SETTINGS.camera.model_copy(update={"saturation_adu": None}))
    made: list[Master] = []
    for plan in plan_masters(rows(tmp_path)):
        made.append(build_master(plan, made, tmp_path / "m", bare))
    assert made[1].n_inputs == 5


def test_flats_at_the_top_of_an_unknown_converter_are_refused(tmp_path):
    make_bias(tmp_path)
    for k in range(5):
        write(tmp_path / f"flat{k}.fits", np.full((NY, NX), 16383, np.uint16), IMAGETYP="flat", EXPTIME=2.0)
    bare = Settings(camera=SETTINGS.camera.model_copy(update={"saturation_adu": None}))
    bias, flat = plan_masters(rows(tmp_path))
    made = [build_master(bias, [], tmp_path / "m", bare)]
    with pytest.raises(FrameError, match=r"at 100–100 % of the linear range.*state the saturation_adu"):
        build_master(flat, made, tmp_path / "m", bare)


def test_without_bias_frames_a_flat_takes_the_shortest_dark(tmp_path):
    make_darks(tmp_path, 120.0)
    make_darks(tmp_path, 30.0)
    make_flats(tmp_path)
    flat = build_all(tmp_path, tmp_path / "m")[-1]
    found = read_master(flat.path)
    truth = response() / np.median(response())
    # 30 s of dark are 15 ADU under 20000 to 30000.
    assert np.abs(found / truth - 1.0).mean() < 0.005
    assert found.std() / truth.std() == pytest.approx(1.0, abs=0.01)


def test_a_flat_needs_a_pedestal(tmp_path):
    make_flats(tmp_path)
    with pytest.raises(FrameError, match=r"flat V .* needs bias frames"):
        build_all(tmp_path, tmp_path / "m")


def test_one_frame_is_taken_with_a_note(tmp_path):
    make_bias(tmp_path, n=1)
    master = build_all(tmp_path, tmp_path / "m")[0]
    assert master.noise is None
    assert "cosmic rays" in master.notes[0]


def test_a_folder_that_cannot_be_written(night, tmp_path):
    (tmp_path / "m").write_text("a file where the folder should be")
    with pytest.raises(FrameError, match="cannot be written"):
        build_all(night, tmp_path / "m")


def test_memory_stays_below_one_block(tmp_path, monkeypatch):
    n, ny, nx, block = 12, 800, 500, 600_000
    for k in range(n):
        data = np.random.default_rng(k).integers(900, 1100, (ny, nx)).astype(np.uint16)
        write(tmp_path / f"{k}.fits", data, IMAGETYP="bias", EXPTIME=0.0)
    monkeypatch.setattr(building, "BLOCK_PIXELS", block)
    plan = plan_masters(rows(tmp_path))[0]
    tracemalloc.start()
    master = build_master(plan, [], tmp_path / "m", SETTINGS)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    # 4 bytes a pixel; combining holds some working copies of a block; result and variance are two images.
    # All inputs at once would be 19 MB as float32 before any copy.
    assert peak < 7 * 4 * block + 4 * 4 * nx * ny
    assert master.n_inputs == n
    monkeypatch.setattr(building, "BLOCK_PIXELS", 10**9)
    whole = build_master(plan, [], tmp_path / "whole", SETTINGS)
    blocks, at_once = (fits.getdata(m.path) for m in (master, whole))
    np.testing.assert_allclose(blocks, at_once, rtol=1e-3)  # the typical scatter differs a little from block to block


# ---- combine ---------------------------------------------------------------------------------------------


def test_cosmic_rays_and_stars_do_not_stay(tmp_path):
    rng = np.random.default_rng(3)
    stack = rng.normal(1000.0, 5.0, (9, 50, 50)).astype(np.float32)
    clean, _ = combine(stack)
    stack[3, 10, 10] += 5000.0
    stack[5, 20, 20:30] += 300.0
    stack[2, 30, 30] = np.nan
    mean, variance = combine(stack)
    assert np.abs(mean - clean).max() < 5.0
    assert np.abs(mean[10, 10] - 1000.0) < 8.0
    assert np.isfinite(mean).all()
    assert typical_sigma(variance, 9) == pytest.approx(5.0, rel=0.03)


@pytest.mark.parametrize("n", [2, 3, 5, 10, 25])
def test_mean_is_unbiased_and_noise_right_for_any_number(n):
    stack = np.random.default_rng(n).normal(0.0, 7.0, (n, 150, 150)).astype(np.float32)
    mean, variance = combine(stack)
    assert abs(mean.mean()) < 5 * 7.0 / np.sqrt(n) / 150
    assert mean.std() == pytest.approx(7.0 / np.sqrt(n), rel=0.03)
    assert typical_sigma(variance, n) == pytest.approx(7.0, rel=0.03)


def test_a_pixel_without_numbers_stays_so():
    stack = np.ones((4, 3, 3), np.float32)
    stack[:, 1, 1] = np.nan
    mean, _ = combine(stack)
    assert np.isnan(mean[1, 1])
    assert np.isfinite(mean).sum() == 8


# ---- choose ----------------------------------------------------------------------------------------------


def light(**changes: object) -> FrameInfo:
    return replace(
        FrameInfo(
            kind="light", band="V", filter_name="V", object_name="", camera="cam", mjd_mid=60000.0, exposure_s=120.0,
            ra_deg=None, dec_deg=None, scale_arcsec=None, gain_e_per_adu=None, read_noise_e=None, saturation_adu=None,
            nx=NX, ny=NY,
        ),
        **changes,
    )  # fmt: skip


def names(chosen: ChosenMasters) -> tuple[object, ...]:
    dark = chosen.dark.exposure_s if chosen.dark else None
    return chosen.bias is not None, dark, chosen.flat is not None


def test_choosing(made):
    assert names(choose_masters(light(), made)) == (True, 120.0, True)
    assert choose_masters(light(), made).notes == ()
    assert names(choose_masters(light(exposure_s=30.0), made)) == (True, 30.0, True)
    shorter = choose_masters(light(exposure_s=60.0), made)
    assert names(shorter) == (True, 120.0, True)
    assert shorter.notes == ("the dark of 120 s was scaled to 60 s.",)
    assert names(choose_masters(light(exposure_s=300.0), made)) == (True, 120.0, True)
    long = replace(made[1], exposure_s=600.0)
    assert names(choose_masters(light(exposure_s=60.0), [*made, long])) == (True, 120.0, True)
    assert names(choose_masters(light(exposure_s=300.0), [*made, long])) == (True, 600.0, True)
    assert names(choose_masters(light(band="B", filter_name="B"), made)) == (True, 120.0, False)
    assert "no flats in B" in choose_masters(light(band="B", filter_name="B"), made).notes[0]
    assert names(choose_masters(light(camera="another"), made)) == (False, None, False)
    assert names(choose_masters(light(nx=NX + 1), made)) == (False, None, False)
    assert names(choose_masters(light(binning=(2, 2)), made)) == (False, None, False)
    assert choose_masters(light(camera="another"), made).digests() == [None] * 6


def test_without_bias_only_the_same_exposure_will_do(made):
    darks = [master for master in made if master.kind != "bias"]
    assert names(choose_masters(light(), darks)) == (False, 120.0, True)
    refused = choose_masters(light(exposure_s=60.0), darks)
    assert names(refused) == (False, None, True)
    assert "cannot be scaled" in " ".join(refused.notes)


def test_the_nearer_temperature_is_chosen(made):
    bias = made[0]
    cold, warm = replace(bias, temperature_c=-21.0, digest="a"), replace(bias, temperature_c=-18.5, digest="b")
    assert choose_masters(light(temperature_c=-20.5), [warm, cold]).bias is cold
    assert choose_masters(light(temperature_c=-19.0), [warm, cold]).bias is warm
    assert choose_masters(light(temperature_c=-10.0), [warm, cold]).bias is None


def test_choice_does_not_depend_on_the_order(made):
    assert choose_masters(light(), made[::-1]) == choose_masters(light(), made)
