"""What flats and biases say of the camera reaches the people who follow it, and only there where it disagrees."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from reduce.campaign.door import Campaign
from reduce.records import Target
from tui.doctor import examine

GAIN, READ_NOISE_E, SHAPE = 1.5, 8.0, (128, 160)
SEQUENCE = "id,ra,dec,V,V_err\n" + "".join(
    f"s{k},{150 + 0.01 * k},{10 + 0.01 * (k % 3)},12.{k},0.01\n" for k in range(6)
)


def raw(level_e: float, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    electrons = rng.poisson(level_e, SHAPE) + rng.normal(0.0, READ_NOISE_E, SHAPE)
    return np.rint(electrons / GAIN + 1000.0).astype(np.uint16)


def night(folder: Path, day: int, gain: float, read_noise_e: float) -> None:
    """Ten biases and six flats of one evening, with a header that states this gain and read noise."""
    folder.mkdir(exist_ok=True)
    for k in range(16):
        is_bias = k < 10
        cards = {
            "IMAGETYP": "bias" if is_bias else "flat", "EXPTIME": 0.0 if is_bias else 3.0, "FILTER": "V",
            "INSTRUME": "Lantern 1", "DATE-OBS": f"2025-03-{day:02d}T18:{10 + k}:00",
            "GAIN": gain, "RDNOISE": read_noise_e,
        }  # fmt: skip
        data = raw(0.0 if is_bias else 30000.0, 100 * day + k)
        fits.PrimaryHDU(data, fits.Header(cards)).writeto(folder / f"{day:02d}-{k:02d}.fits")


def campaign_of(tmp_path: Path) -> Campaign:
    (tmp_path / "stars.csv").write_text(SEQUENCE, encoding="utf-8")
    target = Target("Lantern 3", "other", 150.02, 10.01)
    return Campaign.create(tmp_path / "campaign", tmp_path / "frames", tmp_path / "stars.csv", [target])


def built(campaign: Campaign) -> None:
    campaign.intake.look(lambda text: None)
    campaign.intake.build_masters(campaign.known_frames(), lambda text: None)


@pytest.mark.parametrize(("gain", "read_noise_e", "wrong"), [(1.5, 8.0, False), (2.4, 8.0, True), (1.5, 14.0, True)])
def test_a_header_that_is_wrong_is_said_and_a_right_one_is_not(tmp_path, gain, read_noise_e, wrong):
    night(tmp_path / "frames", 1, gain, read_noise_e)
    campaign = campaign_of(tmp_path)
    built(campaign)
    said = campaign.detector_sentences()
    assert bool(said) is wrong
    standing, _ = campaign.calibration_sentences()
    assert [line for line in standing if "measured" in line] == said
    assert [f.sentence for f in examine(campaign.folder) if "measured" in f.sentence] == said
    if wrong:
        (sentence,) = said
        assert "Lantern 1" in sentence
        assert ("gain 1.5" in sentence) if gain != GAIN else ("read noise 8." in sentence)
        assert "overrides_header = true" in sentence


def test_flats_of_a_later_night_leave_the_recipes_of_the_nights_before_alone(tmp_path):
    night(tmp_path / "frames", 1, GAIN, READ_NOISE_E)
    night(tmp_path / "frames", 2, GAIN, READ_NOISE_E)
    campaign = campaign_of(tmp_path)
    built(campaign)
    flat = next(frame.info for frame in campaign.known_frames() if frame.info.kind == "flat")

    def digests(mjd: float) -> list[str | None]:
        light = replace(flat, kind="light", exposure_s=60.0, mjd_mid=mjd)
        masters = campaign.intake.standing_masters(campaign.known_frames())
        return campaign.intake.chosen(light, masters).digests()

    first_mjd = flat.mjd_mid
    assert first_mjd is not None
    before = digests(first_mjd + 0.1)
    night(tmp_path / "frames", 9, GAIN, READ_NOISE_E)
    built(campaign)
    assert digests(first_mjd + 0.1) == before
    assert digests(first_mjd + 8.1)[2] != before[2]  # a light of the new night takes its own flats
    # and when the files of the old nights are put away, their masters still serve
    for path in (tmp_path / "frames").glob("0[12]-*.fits"):
        path.unlink()
    campaign.intake.look(lambda text: None)
    assert digests(first_mjd + 0.1) == before
