"""Nights of standard fields as frames, through the whole path: header, masters, field, apertures, solution."""

from __future__ import annotations

import json

import numpy as np
import pytest
import standard_field_frames as sky
from small_campaign import fadeline, opened, reductions

from reduce.campaign.door import Campaign
from reduce.campaign.sequences import make_sequence
from reduce.field.sequence import cross_match, read_sequence
from reduce.records import Target

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def campaign(tmp_path_factory):
    """Two nights of standards, and a target whose comparison stars are all of one colour."""
    place = tmp_path_factory.mktemp("standards")
    rng = np.random.default_rng(5)
    frames = place / "frames"
    sky.write_calibration(frames / "calibration", rng, sky.FIRST_MJD - 0.1)
    sky.lay_standard_nights(frames, rng)
    stars = sky.stars_of("target", rng, bv_range=(0.6, 0.8))
    for night in range(2):
        for k in range(3):
            for b, band in enumerate("BV"):
                mjd = sky.FIRST_MJD + night + 0.1 + 0.03 * k + 0.002 * b
                raw, header = sky.exposure(stars, band, mjd, 60.0, rng, zero_point_step=night * sky.NIGHT_STEP[band])
                sky.write(frames / f"n{night}" / f"target{k}{band}.fits", raw, header)
    sky.write_sequence(place / "comparison.csv", stars)
    Campaign.create(
        place / "campaign", frames, place / "comparison.csv", [Target("Invented one", "other", *sky.TARGET_CENTRE)],
        settings_text=sky.SETTINGS_TEXT,
    ).book.close()  # fmt: skip
    done = fadeline("reduce", place / "campaign", "--json")
    return place, stars, [json.loads(line) for line in done.stdout.splitlines()]


def test_frames_of_standards_are_known_by_their_position_and_judged_like_others(campaign):
    place, _, lines = campaign
    rows = lines[:-1]
    assert len(rows) == 52
    assert {row["outcome"] for row in rows} == {"measured"}
    assert {row["state"] for row in rows} == {"kept"}
    with opened(place / "campaign") as door:
        of_standards = door.calibrated().of_standards
        assert len(of_standards) == 40
        picture = door.snapshot()
        assert {row.id for row in picture.frames if row.of_standards} == of_standards
        assert all(point.file not in of_standards for point in door.solution().frame_points)
        assert picture.targets[0].steps[2].detail == "12 frames recognised"


def test_zero_points_extinction_and_colour_terms_come_back_within_a_hundredth(campaign):
    place, _, _ = campaign
    found = [json.loads(line) for line in fadeline("standards", place / "campaign", "--json").stdout.splitlines()]
    assert [row["band"] for row in found] == ["B", "V"]
    for row in found:
        band = row["band"]
        assert row["colour_term"] == pytest.approx(sky.TERMS[band], abs=0.01)
        assert abs(row["colour_term"] - sky.TERMS[band]) < 3.5 * row["colour_term_err"]
        assert row["stars"] == 9
        assert row["set_aside"] == {}
        assert len(row["nights"]) == 2
        for k, night in enumerate(row["nights"]):
            # What the renderer's zero point counts is all the light; 0.1 % of it lies beyond 4 FWHM.
            assert night["zp_mag"] == pytest.approx(sky.ZERO_POINTS[band] + k * sky.NIGHT_STEP[band], abs=0.01)
            assert night["extinction"] == pytest.approx(sky.FIRST_ORDER[band], abs=0.01)
            assert night["extinction_is_own"]
            assert abs(night["extinction"] - sky.FIRST_ORDER[band]) < 3.5 * night["extinction_err"]


def test_colour_terms_of_the_standards_serve_a_sequence_that_has_none(campaign):
    place, _, _ = campaign
    with opened(place / "campaign") as door:
        solution = door.solution()
        assert [term.fitted for term in solution.colour_terms] == [False, False]
        for term in solution.colour_terms:
            assert term.term == pytest.approx(sky.TERMS[term.band], abs=0.01)
            assert term.term_err < 0.01
        points = [point for point in solution.night_points if point.state == "kept"]
        assert len(points) == 4
        for point in points:
            truth = 14.0 + (0.1 if point.band == "B" else 0.0)
            # Without a colour term the target, 0.6 mag bluer than the stars, would be 0.05 mag off in B.
            assert point.mag == pytest.approx(truth, abs=0.01)


def test_sequence_made_from_standards_is_right_and_measures_nothing_again(campaign):
    place, stars, _ = campaign
    folder = place / "campaign"
    made = place / "made.csv"
    fadeline("sequence", "make", folder, "--output", made)
    sequence = read_sequence(made)
    ra, dec = np.array([s.ra_deg for s in stars]), np.array([s.dec_deg for s in stars])
    match = cross_match(sequence.ra_deg, sequence.dec_deg, ra, dec, 1.0)
    assert len(sequence) >= 20
    assert (match >= 1).all()  # the target itself is none
    for band in "BV":
        error = sequence.mag[band] - np.array([stars[k].mag(band) for k in match])
        pull = error / sequence.mag_err[band]
        assert abs(np.nanmedian(error)) < 0.008
        assert np.nanmax(np.abs(error)) < 0.04
        assert np.sqrt(np.nanmean(pull**2)) < 1.6
    before = reductions(folder)
    done = fadeline("sequence", "import", folder, made)
    assert "Nothing is measured again" in done.stderr
    fadeline("reduce", folder)
    assert reductions(folder) == before
    with opened(folder) as door:
        assert door.sequence().name == "made"
        assert any("Comparison sequence made" in row.body for row in door.log())
        assert {row.star for row in door.solution().stars} == set(sequence.ids)
    assert "in force already" in fadeline("sequence", "import", folder, made, code=2).stderr
    assert "exists already" in fadeline("sequence", "make", folder, "--output", made, code=2).stderr


def test_a_night_without_standards_makes_no_sequence(campaign):
    place, _, _ = campaign
    with opened(place / "campaign") as door:
        out = place / "none.csv"
        with pytest.raises(Exception, match="No clear night with standards"):
            make_sequence(door, out, "standards", frozenset({"2025-03-01"}))
        assert not out.exists()


def test_check_prints_every_star_and_says_what_is_wrong(campaign):
    place, _, _ = campaign
    found = json.loads(fadeline("sequence", "check", place / "campaign", "--json").stdout)
    assert {row["word"] for row in found["stars"]} <= {"used", "spare", "set aside"}
    assert all(abs(row["residual_mag"]) < 0.03 for row in found["stars"] if row["word"] == "used")
    for band in found["bands"]:
        assert 0.0 < band["floor_mag"] < 0.01
        assert band["target_colours"][0] == pytest.approx(0.1, abs=0.02)
        assert "bluer in B−V than any comparison star" in band["sentence"]
