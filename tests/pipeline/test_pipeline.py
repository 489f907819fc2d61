"""The two halves of the job on frames of the demo: measure a frame once, solve again and again."""

from __future__ import annotations

import json
import random
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from small_campaign import (
    CALIBRATION,
    FIRST,
    LIGHTS,
    OTHER_FIELD,
    lay,
    make_campaign,
    moved,
    opened,
    reduce_here,
    target_of,
)

from reduce.field.sequence import read_sequence
from reduce.field.wcs import pixel_to_sky
from reduce.frames.master_sets import ChosenMasters, Master, Signature
from reduce.frames.reader import frame_id
from reduce.logbook.store import Logbook
from reduce.pipeline import KnownCamera, Recipe, measure_frame, solve
from reduce.records import Choices
from reduce.settings import read_settings

LIGHT = f"{FIRST}039-V.fits"


@pytest.fixture
def recipe(demo):
    settings = read_settings(demo.place / "observatory.toml")
    return Recipe(settings, ChosenMasters(), (target_of(demo),), read_sequence(demo.place / "comparison.csv"))


def measure(demo, recipe, path=LIGHT):
    file = demo.frames / path
    return measure_frame(file, frame_id(file), recipe)


def assert_bit_equal(one, two):
    for field in fields(one):
        a, b = getattr(one, field.name), getattr(two, field.name)
        if field.name == "seconds":
            continue
        if isinstance(a, np.ndarray):
            assert a.dtype == b.dtype
            assert a.tobytes() == b.tobytes(), field.name
        else:
            assert repr(a) == repr(b), field.name


def test_the_same_frame_twice_is_bit_equal(demo, recipe):
    one, two = measure(demo, recipe), measure(demo, recipe)
    assert one.outcome == "measured"
    assert len(one.stars) > 30
    assert_bit_equal(one, two)


def test_what_calibration_lacked_stays_with_the_frame(demo, recipe):
    notes = measure(demo, recipe).info.notes
    assert any("neither bias nor dark was subtracted" in note for note in notes)


def test_one_or_two_workers_write_the_same_bits(demo, tmp_path):
    rows = []
    for workers in (1, 2):
        folder = make_campaign(demo, tmp_path / str(workers), CALIBRATION + LIGHTS[:4])
        with opened(folder) as campaign:
            for _ in campaign.reduce(workers=workers):
                pass
        with Logbook.open(folder) as book:
            found = {row.frame: replace(row, stamps=book.stamps(row.frame, row.recipe))
                     for row in book.newest_reductions()}  # fmt: skip
            masters = book.masters()
        files = {path.name: path.read_bytes() for path in (folder / "masters").iterdir()}
        rows.append((found, masters, files))
    (one, masters_one, files_one), (two, masters_two, files_two) = rows
    assert len(one) == 4
    assert one.keys() == two.keys()
    for frame in one:
        assert one[frame].stamps
        assert_bit_equal(one[frame], two[frame])
    assert masters_one == masters_two
    assert len(files_one) >= 4
    assert files_one == files_two


def test_the_order_of_rows_does_not_matter(demo):
    with opened(demo.campaign) as campaign:
        rows, sequence, targets = campaign.measured(), campaign.sequence(), campaign.targets()
        settings = campaign.settings
    rows = rows[:36]
    first = solve(rows, sequence, targets, Choices(), settings, with_stars=True)
    assert len(first.night_points) > 8
    dice = random.Random(7)
    for _ in range(2):
        dice.shuffle(rows)
        assert repr(solve(rows, sequence, targets, Choices(), settings, with_stars=True)) == repr(first)


def test_a_target_is_measured_at_its_stated_position_not_at_a_star_nearby(demo, recipe):
    """Half an image width beside the supernova the centroid would walk to it; a forced position stays."""
    target = recipe.targets[0]
    beside = moved(target, "Beside", north_arcsec=1.5)
    row = measure(demo, replace(recipe, targets=(beside,)))
    (star,) = row.stars[row.stars["role"] == 1]
    assert star["target"] == "Beside"
    assert (star["ra_deg"], star["dec_deg"]) == (beside.ra_deg, beside.dec_deg)
    ra, dec = pixel_to_sky(row.solution, np.array([star["x_px"]]), np.array([star["y_px"]]))
    assert abs(dec[0] - beside.dec_deg) * 3600 < 0.01
    assert abs(ra[0] - beside.ra_deg) * 3600 < 0.01
    at_target = measure(demo, recipe)
    (right,) = at_target.stars[at_target.stars["role"] == 1]
    assert star["flux_e"][0] < 0.9 * right["flux_e"][0]  # a small aperture beside the star loses light


def test_a_target_on_its_host_is_measured_with_a_sky_of_its_own(demo, recipe):
    target = recipe.targets[0]
    rows = []
    for one in (replace(target, host_ra_deg=None, host_dec_deg=None),
                replace(target, host_ra_deg=target.ra_deg, host_dec_deg=target.dec_deg + 0.005)):  # fmt: skip
        mine = replace(recipe, targets=(one,))
        rows.append((mine.digest(), measure(demo, mine).stars))
    (plain_digest, plain), (host_digest, host) = rows
    assert plain_digest != host_digest
    mine = plain["role"] == 1
    assert plain[~mine].tobytes() == host[~mine].tobytes()
    assert host["sky_n_px"][mine] < 0.7 * plain["sky_n_px"][mine]


@pytest.mark.parametrize("factor", [0.5, 2.0])
def test_a_scale_that_is_wrong_by_the_binning_does_not_lose_the_field(demo, recipe, factor):
    right = measure(demo, recipe)
    camera = recipe.settings.camera.model_copy(update={"scale_arcsec": factor * right.solution.scale_arcsec})
    row = measure(demo, replace(recipe, settings=recipe.settings.model_copy(update={"camera": camera})))
    assert row.outcome == "measured"
    assert row.solution.scale_arcsec == pytest.approx(right.solution.scale_arcsec, rel=1e-4)


def test_a_target_off_the_frame_or_at_its_edge_has_no_row(demo, recipe):
    target = recipe.targets[0]
    row = measure(demo, replace(recipe, targets=(target, moved(target, "Far", north_arcsec=3600))))
    assert list(row.stars["target"][row.stars["role"] == 1]) == [target.name]


def test_a_frame_of_another_field_is_not_matched(demo, recipe):
    row = measure(demo, recipe, OTHER_FIELD)
    assert row.outcome == "no match"
    assert "comparison sequence" in row.reason
    assert row.solution is None
    assert len(row.stars) == 0
    assert row.quality is not None


def test_a_frame_that_cannot_be_read_is_a_row_with_its_reason(tmp_path, recipe):
    path = tmp_path / "a.fits"
    path.write_bytes(b"SIMPLE")
    row = measure_frame(path, "0" * 64, recipe)
    assert row.outcome == "unreadable"
    assert row.reason.endswith(".")
    missing = measure_frame(tmp_path / "gone.fits", "0" * 64, recipe)
    assert (missing.outcome, missing.info) == ("unreadable", None)


def a_master(kind: str, digest: str) -> Master:
    signature = Signature("Larkrise CCD 1", 512, 512, (1, 1), 1.5)
    return Master(kind, digest, Path("x.fits"), signature, "V", "V", 1.0, -10.0, ("f",), 1, 1.0, 1.0)


def test_a_recipe_changes_with_what_decides_the_pixels_and_with_nothing_else(recipe):
    target = recipe.targets[0]
    stars = recipe.astrometric

    def camera(**changes):
        return replace(recipe, settings=recipe.settings.model_copy(
            update={"camera": recipe.settings.camera.model_copy(update=changes)}))  # fmt: skip

    moved_star = replace(stars, ra_deg=stars.ra_deg + 1e-5)
    different = [
        replace(recipe, masters=ChosenMasters(flat=a_master("flat", "1"))),
        replace(recipe, masters=ChosenMasters(flat=a_master("flat", "2"))),
        replace(recipe, masters=ChosenMasters(bias=a_master("bias", "1"))),
        replace(recipe, masters=ChosenMasters(dark=a_master("dark", "1"))),
        replace(recipe, targets=(moved(target, target.name, north_arcsec=0.1),)),
        replace(recipe, targets=(target, moved(target, "Second", 60))),
        replace(recipe, astrometric=moved_star),
        camera(gain_e_per_adu=1.51),
        camera(read_noise_e=8.1),
        camera(saturation_adu=60000.0),
        camera(linear_limit_adu=50000.0),
    ]
    digests = [one.digest() for one in (recipe, *different)]
    assert len(set(digests)) == len(digests)
    photometry = recipe.settings.photometry.model_copy(update={"aperture_fwhm": {"V": 2.0}, "colour_terms": {"V": 1.0}})
    same = [
        replace(recipe, settings=recipe.settings.model_copy(update={"photometry": photometry})),
        replace(recipe, targets=(replace(target, ebv_mw=1.0, ebv_scale="SFD", z=0.5, spectroscopic_type="Ia"),)),
        replace(recipe, masters=ChosenMasters(notes=("said something",))),
        replace(recipe, astrometric=replace(stars, name="another name")),
    ]
    assert {one.digest() for one in same} == {recipe.digest()}


def test_measuring_leaves_the_file_alone(demo, recipe, tmp_path):
    (path,) = lay(demo, tmp_path, [LIGHT])
    before = path.read_bytes(), path.stat().st_mtime_ns
    path.chmod(0o444)
    measure_frame(path, frame_id(path), recipe)
    assert (path.read_bytes(), path.stat().st_mtime_ns) == before


def test_reducing_again_measures_nothing_and_changes_no_number(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, CALIBRATION + LIGHTS[:3])
    reduce_here(folder)
    with opened(folder) as campaign:
        before = repr(campaign.solution()), campaign.book.reductions_done(), campaign.log()
        reports = list(campaign.reduce(workers=1))
        assert [report.summary["measured_now"] for report in reports] == [0]
        assert (repr(campaign.solution()), campaign.book.reductions_done(), campaign.log()) == before


def test_a_known_camera_finds_a_field_of_four_stars(demo, recipe):
    """Scale and parity of an earlier frame make four stars enough; without them they are not believed."""
    whole = recipe.astrometric
    bright = np.argsort(whole.mag["V"])[:4]
    four = replace(
        whole, ids=tuple(whole.ids[k] for k in bright), ra_deg=whole.ra_deg[bright], dec_deg=whole.dec_deg[bright],
        mag={band: mag[bright] for band, mag in whole.mag.items()},
        mag_err={band: err[bright] for band, err in whole.mag_err.items()},
    )  # fmt: skip
    full = measure(demo, recipe)
    poor = replace(recipe, astrometric=four)
    assert measure(demo, poor).outcome == "no match"
    camera = KnownCamera(round(full.solution.scale_arcsec, 4), full.solution.mirrored)
    found = measure(demo, replace(poor, camera=camera))
    assert found.outcome == "measured"
    assert found.recipe != poor.digest()
    here = full.stars[full.stars["role"] == 1][0]
    there = found.stars[found.stars["role"] == 1][0]
    assert np.hypot(here["x_px"] - there["x_px"], here["y_px"] - there["y_px"]) < 0.3


def test_a_lost_frame_gets_a_second_look_when_its_camera_is_known(demo):
    with Logbook.open(demo.campaign) as book:
        truth = json.loads((demo.place / "truth.json").read_text())
        foreign = next(frame["file"] for frame in truth["frames"] if frame["fault"] == "another field")
        frame = next(key for key, name in book.file_names().items() if name == foreign)
        recipes = {recipe for lost, recipe in book.unrecognised() if lost == frame}
        assert len(recipes) == 2
        info = next(row.info for row in book.newest_reductions() if row.frame == frame)
        assert book.first_solution(info).scale_arcsec == pytest.approx(1.021, rel=0.002)
