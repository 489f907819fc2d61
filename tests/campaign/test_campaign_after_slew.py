"""The line after a slew and the alerts of a night: from rows of frames to words."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.campaign.after_slew import after_slew, progress_of
from reduce.campaign.alerts import alerts_of
from reduce.views import FrameRow

TARGET = "Vesna 7"


def frame(k: int, band: str = "V", night: str = "2031-05-27", **facts) -> FrameRow:
    values = {
        "id": f"{k:064d}", "file": f"f{k}.fits", "path": f"/f{k}.fits", "kind": "light", "band": band,
        "mjd": 63013.9 + 0.001 * k, "night": night, "exposure_s": 60.0, "outcome": "measured", "state": "kept",
        "reason": "", "provisional": False, "by_person": False, "targets": (TARGET,), "snr": {TARGET: 30.0},
        "peak_adu": 9000.0, "limit_adu": 50000.0, "offset_arcmin": 0.4, "rotation_deg": 179.8, "fwhm_arcsec": 2.0,
        "airmass": 1.2,
    }  # fmt: skip
    return FrameRow(**(values | facts))


def test_two_equal_frames_reach_the_root_of_two_of_one():
    (band,) = progress_of([frame(1), frame(2)], TARGET, "2031-05-27", {})
    assert band.snr == pytest.approx(30.0 * math.sqrt(2.0))
    assert (band.n_frames, band.goal, band.enough) == (2, 50.0, False)


@given(st.lists(st.floats(0.1, 500.0), min_size=1, max_size=20))
def test_more_frames_never_lower_what_was_reached_and_equal_the_weighted_mean(values):
    rows = [frame(k, snr={TARGET: value}) for k, value in enumerate(values)]
    reached = [progress_of(rows[:n], TARGET, "2031-05-27", {})[0].snr for n in range(1, len(rows) + 1)]
    assert all(after >= before for before, after in pairwise(reached))
    # a constant flux of 1 measured with errors 1/(S/N): the error of its weighted mean
    assert reached[-1] == pytest.approx(math.sqrt(sum(1.0 / (1.0 / v) ** 2 for v in values)))


def test_other_nights_dropped_frames_and_other_bands_do_not_count():
    rows = [frame(0, night="2031-05-26"), frame(1, state="dropped"), frame(2, "B"), frame(3)]
    found = {band.band: band for band in progress_of(rows, TARGET, "2031-05-27", {"B": 25.0})}
    assert found["V"].snr == pytest.approx(30.0)
    assert found["B"].enough
    assert found["B"].goal == 25.0


def test_it_says_how_many_more_then_change_filter_then_next_target():
    rows = [frame(0, "B", night="2031-05-20"), frame(1)]
    assert after_slew(rows, {}).advice == "go on in V: about 2 more like this"  # (50² − 30²) / 30² = 1.8
    rows += [frame(2), frame(3)]
    assert after_slew(rows, {}).advice == "enough in V, change filter: B to go"
    rows += [frame(k, "B") for k in range(4, 7)]
    assert after_slew(rows, {}).advice == "enough in all bands: go on to the next target"


def test_the_telescope_comes_before_the_time():
    line = after_slew([frame(1, peak_adu=46000.0)], {})
    assert line.too_bright
    assert line.advice.startswith("expose shorter")
    lost = after_slew([frame(1), frame(2, outcome="no match", targets=(), reason="only 3 stars")], {})
    assert lost.file == "f2.fits"
    assert "not recognised" in lost.advice
    assert lost.bands == ()
    beside = after_slew([frame(1, targets=())], {})
    assert "correct the pointing" in beside.advice
    assert after_slew([], {}) is None
    assert after_slew([frame(1, outcome="waiting")], {}) is None


def test_without_signal_no_number_of_frames_is_invented():
    for facts in ({"snr": {}}, {"snr": {TARGET: 0.001}}, {"snr": {TARGET: -2.0}}, {"state": "dropped"}):
        assert after_slew([frame(1, **facts)], {}).advice == "go on in V"


def test_alerts_tell_of_cloud_dropping_and_light_once_a_frame():
    rows = [
        frame(1),
        frame(2, state="doubtful", reason="cloud: the sky let through 0.4 mag less than when clear"),
        frame(3, state="dropped", reason="a satellite or an aeroplane crossed Vesna 7"),
        frame(4, peak_adu=49000.0),
        frame(5, state="dropped", reason="no good", by_person=True),
    ]
    found = alerts_of(rows, 30.0)
    assert [(alert.kind, alert.id[-1]) for alert in found] == [("cloud", "2"), ("dropped", "3"), ("saturated", "4")]
    assert "98 % of linear" in found[-1].sentence
    assert len({alert.id for alert in found}) == len(found)
    assert alerts_of(rows[:3], 30.0) == found[:2]


def test_focus_drift_is_told_when_it_is_crossed_and_not_for_one_gust():
    steady = [frame(k) for k in range(6)]
    gust = [*steady, frame(6, fwhm_arcsec=4.0), frame(7), frame(8)]
    assert alerts_of(gust, 30.0) == ()
    drift = [*steady, *(frame(6 + k, fwhm_arcsec=2.0 + 0.3 * k) for k in range(6))]
    assert [alert.kind for alert in alerts_of(drift, 30.0)] == ["focus"]


def test_a_target_that_sinks_through_the_limit_is_told_once():
    rows = [frame(k, airmass=airmass) for k, airmass in enumerate((1.8, 1.95, 2.05, 2.2))]
    (alert,) = alerts_of(rows, 30.0)  # airmass 2 at 30°, plane-parallel: sec z
    assert alert.kind == "low"
    assert alert.id.endswith("2")
    assert alerts_of(rows[::-1], 30.0) == ()  # it rises


def test_only_the_newest_night_is_alarming():
    old = replace(frame(1, night="2031-05-26"), state="dropped", reason="trailed")
    assert alerts_of([old, frame(2)], 30.0) == ()
