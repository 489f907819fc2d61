"""Plans of a whole campaign: the invented one, reduced, and what is missing said in one sentence."""

import json
import math
import tomllib
from pathlib import Path

import pytest
from small_campaign import fadeline, opened

from reduce.plain_text import PlainError
from reduce.plan.telescope import telescope_noise
from reduce.settings import Settings

SCENARIO = tomllib.loads((Path(__file__).parents[2] / "demo_frames" / "scenario.toml").read_text(encoding="utf-8"))
MEAN_AGE_D = 14.0
"""Of the twelve nights, since the first."""
DAY_AFTER_FIFTH_NIGHT = 60741.95  # 2025-03-07, 22:48 UTC


@pytest.fixture(scope="module")
def campaign(demo, tmp_path_factory):
    with opened(demo.copy(tmp_path_factory.mktemp("plan") / "campaign")) as found:
        yield found


def test_noise_model_of_the_demo_is_that_of_its_renderer(campaign) -> None:
    noise = telescope_noise(campaign.measured(), campaign.solution(), campaign.settings)
    assert noise is not None
    assert set(noise.bands) == set("BVRI")
    for band, one in noise.bands.items():
        truth = SCENARIO["bands"][band]
        # the renderer's zero point holds at the centre of the field and on the first night: a flat of mean 1 spreads
        # the vignetting, v (x² + y²) / 2 with x, y from -1 to 1, v / 3 on average; the mirror loses light day by day
        spread = 2.5 * math.log10(1.0 - SCENARIO["camera"]["vignetting"] / 3.0)
        dimmed = SCENARIO["sky"]["mirror_dimming_per_day"] * MEAN_AGE_D
        true = truth["zero_point"] - 1.2 * truth["first_order"] + spread - dimmed
        # the night's zero points scatter by 0.02 mag, twelve of them; extinctions of too few airmasses are usual ones,
        # so that only what counts near airmass 1.2 is compared
        assert one.zero_point - 1.2 * one.extinction == pytest.approx(true, abs=0.025)
        # the photometry is in larger or smaller apertures than planned, on a galaxy: not far from what is expected
        assert 0.8 < one.actual_to_expected < 1.4


def test_plan_of_a_night(campaign) -> None:
    plan = campaign.plan(DAY_AFTER_FIFTH_NIGHT)
    assert plan.night == "2025-03-07"
    (one,) = plan.targets
    start, end = one.night.window
    assert plan.mjd[0] < start < one.night.transit_mjd < end < plan.mjd[-1]
    assert len(plan.mjd) == len(plan.sun_altitude_deg) == len(plan.moon_altitude_deg) == len(one.night.altitude_deg)
    for advice in one.tonight:
        assert max(start, DAY_AFTER_FIFTH_NIGHT) <= advice.mjd <= end
    assert one.sentence
    assert plan.cautions


def test_morning_after_plans_the_coming_night(campaign) -> None:
    assert campaign.plan(60742.4).night == "2025-03-08"  # 09:36 UTC of the 8th, the Sun is up


def test_same_campaign_same_moment_same_plan(campaign) -> None:
    assert campaign.plan(DAY_AFTER_FIFTH_NIGHT) == campaign.plan(DAY_AFTER_FIFTH_NIGHT)


def test_goal_out_of_reach_asks_for_exposures(campaign) -> None:
    usual = campaign.settings
    try:
        campaign.settings = usual.model_copy(
            update={"planning": usual.planning.model_copy(update={"mu_err_goal": 0.11})}
        )  # fmt: skip
        (one,) = campaign.plan(DAY_AFTER_FIFTH_NIGHT).targets
    finally:
        campaign.settings = usual
    assert one.tonight or one.later
    assert one.candidates
    errors = [advice.mu_err for advice in (*one.tonight, *one.later)]
    assert errors == sorted(errors, reverse=True)


def test_without_a_site_one_sentence(campaign) -> None:
    usual = campaign.settings
    try:
        campaign.settings = Settings()
        with pytest.raises(PlainError, match=r"needs the site.*latitude_deg"):
            campaign.plan(DAY_AFTER_FIFTH_NIGHT)
    finally:
        campaign.settings = usual


def test_commands_print_json_without_nan(campaign) -> None:
    folder = campaign.folder
    plan = json.loads(fadeline("plan", folder, "--night", "2025-03-07", "--json").stdout)
    assert plan["night"] == "2025-03-07"
    assert plan["targets"][0]["night"]["window"]
    advice = json.loads(fadeline("advise", folder, "--night", "2025-03-07", "--json").stdout)
    assert set(advice) == {"target", "sentence", "tonight", "later", "candidates"}
    assert fadeline("plan", folder, "--night", "yesterday", code=2).stderr.count("\n") == 1
