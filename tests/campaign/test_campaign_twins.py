"""Several files of one exposure count once; which of them, and that the others say why they do not."""

from __future__ import annotations

import os
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from small_campaign import BIAS, DARKS, FLATS, LIGHTS, lay, make_campaign, make_old, opened, reduce_here

from reduce.campaign.intake import Intake, KnownFrame
from reduce.campaign.twins import stand_ins
from reduce.frames.arrival import MOST_AHEAD_D, UNIX_EPOCH_MJD, refuse_future
from reduce.frames.treated import STEPS
from reduce.records import FrameError, FrameInfo

RAW = FrameInfo(
    kind="light", band="V", filter_name="V", object_name="", camera="cam", mjd_mid=60380.0, exposure_s=60.0,
    ra_deg=150.0, dec_deg=20.0, scale_arcsec=1.0, gain_e_per_adu=1.5, read_noise_e=8.0, saturation_adu=65535.0, nx=40,
    ny=30,
)  # fmt: skip
DONE = replace(RAW, calibrated=STEPS, nx=36)
SECOND = 1 / 86400


def used(infos: list[FrameInfo], masters_stand: bool = True) -> list[int]:
    """Which of some frames count."""
    frames = [KnownFrame(str(k), Path(f"{k}.fits"), info) for k, info in enumerate(infos)]
    instead = stand_ins(frames, lambda _: masters_stand)
    return [k for k in range(len(infos)) if str(k) not in instead]


def test_raw_when_masters_stand_else_the_calibrated_copy():
    assert used([RAW, DONE]) == used([RAW, DONE, DONE]) == [0]
    assert used([DONE, RAW]) == [1]
    assert used([RAW, DONE], masters_stand=False) == [1]
    assert used([RAW, replace(DONE, calibrated=("dark",)), DONE], masters_stand=False) == [2]


def test_copies_alike_count_as_the_first():
    assert used([RAW, replace(RAW, notes=("solved",))], masters_stand=False) == [0]
    assert used([DONE, replace(DONE, mjd_mid=60380.0 + 0.4 * SECOND)]) == [0]


@pytest.mark.parametrize(
    "change",
    [
        {"mjd_mid": 60380.0 + 60 * SECOND}, {"mjd_mid": None}, {"exposure_s": 30.0}, {"exposure_s": 0.5}, {"band": "B"},
        {"camera": "other"}, {"chip": "2"}, {"ra_deg": 151.0}, {"kind": "flat"}, {"nx": 99},
    ],
)  # fmt: skip
def test_other_exposures_count_too(change):
    assert used([RAW, replace(RAW, **change)]) == [0, 1]


def test_short_exposures_may_begin_in_the_same_second():
    assert used([replace(RAW, exposure_s=0.5)] * 3) == [0, 1, 2]


def test_a_later_pair_is_a_pair_of_its_own():
    later = {"mjd_mid": 60380.0 + 61 * SECOND}
    assert used([RAW, DONE, replace(RAW, **later), replace(DONE, **later)]) == [0, 2]


# ---- a whole campaign ------------------------------------------------------------------------------------


def calibrated_copy(raw: Path) -> Path:
    """As another program would have left it: offset taken off, flat of one, electrons."""
    with fits.open(raw) as units:
        data, header = units[0].data.astype(np.float32), units[0].header.copy()
    for keyword in ("BZERO", "BSCALE"):
        header.remove(keyword, ignore_missing=True)
    header["CALSTAT"] = "BDF"
    path = raw.with_name(raw.stem + "-done.fits")
    fits.PrimaryHDU(data - np.float32(np.percentile(data, 1)), header).writeto(path)
    return make_old(path)


def frames_shown(folder: Path) -> dict[str, tuple[str, str | None, str]]:
    with opened(folder) as campaign:
        return {row.file: (row.outcome, row.state, row.reason) for row in campaign.frame_rows()}


def test_dawn_flats_turn_from_the_calibrated_copy_to_the_raw_frame(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, LIGHTS[:1])
    raw = tmp_path / "frames" / Path(LIGHTS[0]).name
    done = calibrated_copy(raw)
    reduce_here(folder)
    shown = frames_shown(folder)
    assert shown[raw.name] == ("not used", "dropped", f"not used: the same exposure as {done.name}")
    assert shown[done.name][0] == "measured"
    assert "flat" not in shown[done.name][2]

    lay(demo, tmp_path / "frames", [*BIAS, *DARKS, *FLATS])
    reduce_here(folder)
    shown = frames_shown(folder)
    assert shown[raw.name][0] == "measured"
    assert shown[done.name] == ("not used", "dropped", f"not used: the same exposure as {raw.name}")
    with opened(folder) as campaign:
        assert len(campaign.measured()) == 1


# ---- the future ------------------------------------------------------------------------------------------

NOW_S = (60380.0 - UNIX_EPOCH_MJD) * 86400


@pytest.mark.parametrize("days", [-3000.0, 0.0, 0.99])
def test_a_frame_of_the_past_or_of_another_time_zone_is_taken(days):
    refuse_future(replace(RAW, mjd_mid=60380.0 + days), NOW_S)


@pytest.mark.parametrize("days", [1.01, 365.0, 20000.0])
def test_a_frame_of_the_future_is_refused(days):
    with pytest.raises(FrameError, match=r"dated 20\d\d-.* clock says 2024-03-11T00:00 UTC; set the clock") as caught:
        refuse_future(replace(RAW, mjd_mid=60380.0 + days), NOW_S)
    assert str(caught.value).endswith(".")
    refuse_future(replace(RAW, kind="flat", mjd_mid=60380.0 + days), NOW_S)  # the time of a flat decides nothing
    refuse_future(replace(RAW, mjd_mid=None), NOW_S)


def test_the_clock_that_arrival_is_given_decides(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, LIGHTS[:1])  # a frame of February 2025
    raw = tmp_path / "frames" / Path(LIGHTS[0]).name
    with opened(folder) as campaign:
        intake: Intake = campaign.intake
        mjd = 60732.0  # 2025-02-26
        then = (mjd - MOST_AHEAD_D - 2 - UNIX_EPOCH_MJD) * 86400
        os.utime(raw, (then - 100, then - 100))
        assert intake.look(lambda _: None, now_s=lambda: then)
        assert intake.known_frames() == []
        assert "is dated 2025-02-2" in campaign.book.problems()[raw].sentence
    with opened(folder) as campaign:  # the clock was set, and the program started again
        assert campaign.intake.look(lambda _: None, now_s=time.time)
        assert len(campaign.intake.known_frames()) == 1
        assert not campaign.book.problems()
