"""Host light: a reference that comes later, choices and undo, without a frame being read again.

The frames of the demo's first night serve as the reference of a later one. They hold the supernova too, so what must
come out is what the supernova brightened by, which the renderer's truth says.
"""

from __future__ import annotations

import json
from dataclasses import replace

import pytest
from small_campaign import BIAS, DARKS, FIRST, FLATS, lay, make_campaign, opened, reduce_here, reductions, target_of

from reduce.campaign.door import CampaignError

LATER = "2025-03-02/20250302-"
SCIENCE = [f"{LATER}{n:03}-V.fits" for n in (4, 5, 6)]
REFERENCE = [f"{FIRST}{n:03}-V.fits" for n in (39, 40, 41)]


def true_mag(demo, path):
    frames = json.loads((demo.place / "truth.json").read_text())["frames"]
    return next(frame["true_mag"] for frame in frames if frame["path"] == path)


@pytest.fixture
def folder(demo, tmp_path):
    """Reduced without a reference; the reference's frames lie elsewhere."""
    made = make_campaign(demo, tmp_path, [*BIAS, *DARKS, *FLATS, *SCIENCE], [replace(target_of(demo), kind="other")])
    lay(demo, tmp_path / "reference", REFERENCE)
    reduce_here(made)
    return made


def take_reference(folder):
    with opened(folder) as campaign:
        target = campaign.target(None)
        campaign.correct_target(replace(target, reference_folder=str(folder.parent / "reference")))
    reduce_here(folder)


def night_point(campaign):
    (point,) = campaign.curve(campaign.target(None).name)
    return point


def test_a_later_reference_is_taken_off_old_frames_and_the_log_says_what_moved(demo, folder):
    with opened(folder) as campaign:
        before = night_point(campaign)
    done = reductions(folder)
    take_reference(folder)
    assert len(reductions(folder)) == len(done) + len(REFERENCE), "no frame of the target was read again"
    fluxes = [10 ** (-0.4 * (true_mag(demo, paths[1]) - 25.0)) for paths in (SCIENCE, REFERENCE)]
    with opened(folder) as campaign:
        point = night_point(campaign)
        assert (point.host_method, point.n_frames, point.provisional) == ("reference", 3, False)
        shared = point.flux * (point.err_night**2 + point.err_band**2) ** 0.5 / 1.0857
        assert abs(point.flux - (fluxes[0] - fluxes[1])) < 4.0 * (point.flux_err**2 + shared**2) ** 0.5
        assert point.flux < 0.8 * before.flux
        (line,) = [row.body for row in campaign.log() if "Host light taken off" in row.body]
        assert "3 earlier frames (reference)" in line
        assert f"at most {abs(point.mag - before.mag):.3f} mag" in line
        assert any("may hold light of the supernova" in note for note in campaign.host_summary(point.star))
        assert not campaign.host_tasks(), "nothing is left to be done"
        assert {row.kind for row in campaign.frame_rows() if "041-V" in row.file} == {"reference"}
        assert all(row.state == "kept" for row in campaign.frame_rows() if row.kind == "light")


def test_a_choice_and_its_undo_bring_back_exactly_the_old_numbers(folder):
    with opened(folder) as campaign:
        name = campaign.target(None).name
        before = repr(campaign.curve(name, per_frame=True))
    take_reference(folder)
    with opened(folder) as campaign:
        subtracted = repr(campaign.curve(name, per_frame=True))
        assert subtracted != before
        campaign.decide(f"host:{name}", "method", "annulus")
        assert repr(campaign.curve(name, per_frame=True)) == before
        campaign.undo()
        assert repr(campaign.curve(name, per_frame=True)) == subtracted
        for row in [row for row in campaign.frame_rows() if row.kind == "reference"]:
            campaign.decide(f"frame:{row.id}", "state", "drop", "clouds")
        assert night_point(campaign).host_method == "bent annulus"


def test_a_reference_frame_set_aside_changes_the_reference(folder):
    take_reference(folder)
    with opened(folder) as campaign:
        before = night_point(campaign)
        row = next(row for row in campaign.frame_rows() if row.kind == "reference")
        campaign.decide(f"frame:{row.id}", "state", "drop", "clouds")
        assert campaign.wants_host_work()
        assert night_point(campaign).provisional
    reduce_here(folder)
    with opened(folder) as campaign:
        after = night_point(campaign)
        assert (after.host_method, after.provisional) == ("reference", False)
        assert 0.0 < abs(after.mag - before.mag) < 0.1


def test_what_the_reference_holds_is_said_where_mu_is_read(folder):
    take_reference(folder)
    with opened(folder) as campaign:
        found = campaign.estimate(campaign.target(None).name)
        assert any("light of the supernova itself" in warning.evidence for warning in found.warnings)


def test_a_reference_that_is_taken_away_leaves_no_science_behind(folder):
    """Its frames lie outside the frames folder: they were never the target's."""
    with opened(folder) as campaign:
        name = campaign.target(None).name
        before = repr(campaign.curve(name, per_frame=True))
    take_reference(folder)
    with opened(folder) as campaign:
        campaign.correct_target(replace(campaign.target(None), reference_folder=None))
    reduce_here(folder)
    with opened(folder) as campaign:
        assert repr(campaign.curve(name, per_frame=True)) == before
        assert {row.kind for row in campaign.frame_rows()} == {"light", "bias", "dark", "flat"}


def test_the_frames_are_no_reference_and_without_one_none_can_be_chosen(folder):
    with opened(folder) as campaign:
        target = campaign.target(None)
        for there in (folder.parent / "frames", folder.parent):
            with pytest.raises(CampaignError, match="holds the frames folder"):
                campaign.correct_target(replace(target, reference_folder=str(there)))
        with pytest.raises(CampaignError, match="has no reference"):
            campaign.decide(f"host:{target.name}", "method", "reference")
