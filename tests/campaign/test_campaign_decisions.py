"""What people decide: it changes the numbers at once, is written down, and is taken back without a trace in them."""

from __future__ import annotations

from dataclasses import replace

import pytest
from small_campaign import BIAS, FLATS, LIGHTS, fadeline, lay, make_campaign, opened, reduce_here, target_of

from reduce.campaign.decide import DecisionError, decision_of
from reduce.curve.light_curve import to_light_curve
from reduce.logbook.database import LogbookError
from reduce.records import LADDER_FWHM

TARGET = "Larkrise 25a"


@pytest.fixture
def campaign(demo, tmp_path):
    with opened(demo.copy(tmp_path / "campaign")) as campaign:
        yield campaign


def numbers(campaign):
    """Everything that a decision may move."""
    estimate = campaign.estimate(TARGET)
    return repr((campaign.curve(TARGET), campaign.curve(TARGET, per_frame=True), estimate))


def kept_point(campaign, band="V", k=5):
    return [p for p in campaign.curve(TARGET) if p.state == "kept" and p.band == band][k]


def frame_of(campaign, state, **wanted):
    return next(
        row
        for row in campaign.frame_rows()
        if row.kind == "light" and row.state == state and all(getattr(row, key) == v for key, v in wanted.items())
    )


def test_to_exclude_a_point_changes_mu_and_undo_brings_back_exactly_the_old_numbers(campaign):
    before, mu = numbers(campaign), campaign.estimate(TARGET).mu
    history, lines = campaign.book.history(TARGET), campaign.log()
    point = kept_point(campaign)
    row = campaign.decide(f"point:{TARGET}:{point.night}:V", "exclude", "yes", "a satellite")
    after = campaign.estimate(TARGET)
    assert after.mu != mu
    assert after.n == campaign.book.history(TARGET)[-2].n - 1
    assert next(p for p in campaign.curve(TARGET) if (p.night, p.band) == (point.night, "V")).state == "excluded"
    words = campaign.undo()
    assert numbers(campaign) == before
    assert "excluded" in words
    new = campaign.log()[len(lines) :]
    assert [line.kind for line in new] == ["decision", "undo"]
    assert new[0] == row
    assert "a satellite" in new[0].body
    added = campaign.book.history(TARGET)[len(history) :]
    assert [one.mu for one in added] == [after.mu, mu]
    assert "excluded" in added[0].why
    assert "taken back" in added[1].why


def test_to_drop_a_frame_takes_it_out_and_auto_gives_it_back(campaign):
    before = numbers(campaign)
    frame = frame_of(campaign, "kept", band="V")
    campaign.decide(f"frame:{frame.id}", "state", "drop", "aeroplane")
    row = next(row for row in campaign.frame_rows() if row.id == frame.id)
    assert (row.state, row.by_person) == ("dropped", True)
    assert frame.id not in {p.file for p in campaign.solution().frame_points if p.state == "kept"}
    (night,) = [p for p in campaign.curve(TARGET) if (p.night, p.band) == (frame.night, "V")]
    assert night.n_frames == 2
    assert numbers(campaign) != before
    campaign.decide(f"frame:{frame.id}", "state", "auto")
    assert numbers(campaign) == before


def test_a_dropped_frame_can_be_kept_and_one_without_measurement_cannot(campaign):
    torn = frame_of(campaign, "dropped", outcome="measured", band="R")
    campaign.decide(f"frame:{torn.id}", "state", "keep")
    row = next(row for row in campaign.frame_rows() if row.id == torn.id)
    assert (row.state, row.by_person) == ("kept", True)
    lost = frame_of(campaign, "dropped", outcome="no match")
    before = numbers(campaign)
    campaign.decide(f"frame:{lost.id}", "state", "keep")
    row = next(row for row in campaign.frame_rows() if row.id == lost.id)
    assert row.state == "dropped"
    assert row.reason
    assert numbers(campaign) == before


def test_doubtful_frames_stay_out_of_mu_until_a_person_keeps_them(campaign):
    frame = frame_of(campaign, "kept", band="B")
    night = [row for row in campaign.frame_rows() if (row.night, row.band, row.state) == (frame.night, "B", "kept")]
    n = campaign.estimate(TARGET).n
    before = numbers(campaign)
    for row in night:  # nobody can decide "doubtful": what the program says of a frame without flat is put in its place
        campaign.book.decide(*decision_of(f"frame:{row.id}", "state", "drop")[:2], "doubtful", "", "test")
    (point,) = [p for p in campaign.curve(TARGET) if (p.night, p.band) == (frame.night, "B")]
    assert point.state == "doubtful"
    assert campaign.estimate(TARGET).n == n - 1
    for row in night:
        campaign.decide(f"frame:{row.id}", "state", "keep")
    assert campaign.estimate(TARGET).n == n
    for _ in range(2 * len(night)):
        campaign.undo()
    assert numbers(campaign) == before


def test_frames_that_the_program_doubts_do_not_count_by_default(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*BIAS, LIGHTS[2]])
    reduce_here(folder)
    with opened(folder) as campaign:
        (row,) = [row for row in campaign.frame_rows() if row.kind == "light"]
        assert row.state == "doubtful"
        (point,) = campaign.curve(TARGET)
        assert point.state == "doubtful"
        assert len(to_light_curve(campaign.curve(TARGET))) == 0
        campaign.decide(f"frame:{row.id}", "state", "keep")
        (point,) = campaign.curve(TARGET)
        assert point.state == "kept"
        assert len(to_light_curve(campaign.curve(TARGET))) == 1


def test_a_star_set_aside_leaves_the_zero_points(campaign):
    before = numbers(campaign)
    solution = campaign.solution()
    star = next(star for star in solution.stars if star.word == "used" and star.band == "V")
    frame = frame_of(campaign, "kept", band="V")
    n = solution.zero_points[frame.id].n_stars
    campaign.decide(f"star:{star.star}", "use", "set aside", "a variable")
    after = campaign.solution()
    assert {s.word for s in after.stars if s.star == star.star} == {"set aside"}
    assert after.zero_points[frame.id].n_stars == n - 1
    assert numbers(campaign) != before
    campaign.decide(f"star:{star.star}", "use", "use")
    assert numbers(campaign) == before


@pytest.mark.parametrize("radius", [LADDER_FWHM[2], LADDER_FWHM[-2]])
def test_a_chosen_aperture_is_used_in_its_band_alone(campaign, radius):
    before = numbers(campaign)
    other = [p.mag for p in campaign.curve(TARGET) if p.band == "I"]
    campaign.decide("aperture:B", "fwhm", f"{radius:g}")
    zero_points = campaign.solution().zero_points.values()
    assert {zp.aperture_fwhm for zp in zero_points if zp.band == "B"} == {radius}
    # V − I takes part in I, and B in V: what is left of that is far below a millimagnitude
    assert [p.mag for p in campaign.curve(TARGET) if p.band == "I"] == pytest.approx(other, abs=1e-4)
    assert campaign.undo()
    assert numbers(campaign) == before


def test_undo_goes_back_through_everything_and_then_has_nothing_left(campaign):
    point = kept_point(campaign)
    frame = frame_of(campaign, "kept", band="B")
    steps = [("aperture:V", "fwhm", "2"), (f"point:{TARGET}:{point.night}:V", "exclude", "yes"),
             (f"frame:{frame.id}", "state", "drop"), ("aperture:V", "fwhm", "3")]  # fmt: skip
    seen = [numbers(campaign)]
    for step in steps:
        campaign.decide(*step)
        seen.append(numbers(campaign))
    assert len(set(seen)) == len(seen)
    for expected in reversed(seen[:-1]):
        assert campaign.undo()
        assert numbers(campaign) == expected
    assert campaign.undo() == ""


def test_decisions_outlive_new_calibration(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*BIAS, *LIGHTS[2:4]])
    reduce_here(folder)
    with opened(folder) as campaign:
        row = next(row for row in campaign.frame_rows() if row.kind == "light")
        campaign.decide(f"frame:{row.id}", "state", "drop")
    lay(demo, tmp_path / "frames", [path for path in FLATS if "flatV" in path])
    reduce_here(folder)
    with opened(folder) as campaign:
        states = {one.id: (one.state, one.by_person) for one in campaign.frame_rows() if one.kind == "light"}
        assert states.pop(row.id) == ("dropped", True)
        assert list(states.values()) == [("kept", False)]


def test_a_decision_is_seen_by_another_process_at_once(campaign):
    point = kept_point(campaign)
    stamp = campaign.book.stamp()
    campaign.decide(f"point:{TARGET}:{point.night}:V", "exclude", "yes", "=HYPERLINK(1)\x1b[2J")
    assert campaign.book.stamp() > stamp
    said = fadeline("curve", campaign.folder).stdout
    assert any("excluded" in line and point.night in line for line in said.splitlines())
    assert "\x1b" not in fadeline("log", campaign.folder).stdout


@pytest.mark.parametrize(
    ("subject", "aspect", "value", "error"),
    [
        ("frame:x", "state", "burn", DecisionError),
        ("planet:x", "state", "keep", DecisionError),
        ("point:x", "exclude", "yes", DecisionError),
        ("aperture:V", "fwhm", "2.2", LogbookError),
        ("aperture:Q", "fwhm", "2", LogbookError),
        ("", "", "", DecisionError),
    ],
)
def test_what_cannot_be_decided_is_refused_and_changes_nothing(campaign, subject, aspect, value, error):
    lines = campaign.log()
    with pytest.raises(error):
        campaign.decide(subject, aspect, value)
    assert campaign.log() == lines


def test_a_target_whose_name_has_a_colon_can_be_decided_about(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [LIGHTS[2]], [replace(target_of(demo), name="Lantern: 3")])
    reduce_here(folder)
    with opened(folder) as campaign:
        (point,) = campaign.curve("Lantern: 3")
        campaign.decide(f"point:Lantern: 3:{point.night}:V", "exclude", "yes")
        (point,) = campaign.curve("Lantern: 3")
        assert point.state == "excluded"
