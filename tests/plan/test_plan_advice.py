"""What is advised: it pays, it costs what it says, and it is silent when nothing pays."""

from dataclasses import replace

import advice_scenarios
import numpy as np
import pytest
from candle_light_curves import TRUTH, simulated, target
from plan_samples import dark_hours, good_night, telescope

from reduce.plan.advice import cheapest_way, reason, scheduled, settled
from reduce.plan.forecast import Slot, outlook, solved_curve
from reduce.plan.hours import Option
from reduce.plan.pulsator import nearest_to_gap, pulsator_plan, widest_gap
from reduce.plan.supernova import supernova_plan
from reduce.records import BandMean, Estimate, Point, Pulsation, Target
from reduce.settings import Planning

COST = Planning(slew_s=90, filter_s=15, readout_s=10)
NIGHT, T_MAX = "2023-07-18", TRUTH["t_max"]


def seen(bands="BV", last=4.0, err=0.02):
    return simulated(TRUTH, bands=bands, phases=np.arange(-6.0, last, 3.0), err=err, noise=np.random.default_rng(11))


def planned(curve, first_phase, nights=30, cost=COST, noise=None):
    mjd = T_MAX + first_phase * 1.02
    when = dark_hours(NIGHT, mjd, nights)
    return supernova_plan(
        target(), good_night(mjd), solved_curve(curve, target()), None, (), noise or telescope(), when, cost
    )


def small_choice():
    """Three nights, two bands, one way to fill each slot."""
    slots = [Slot(f"n{day}", T_MAX + phase, band) for day, phase in enumerate((8.0, 15.0, 24.0)) for band in "BI"]
    options = [(Option(1, 60.0, 50.0),)] * len(slots)
    return outlook(solved_curve(seen(), target()), slots, {}), slots, options


def test_way_stops_at_the_goal_and_not_before() -> None:
    ahead, slots, options = small_choice()
    untouched = ahead.mu_variance
    goal = 0.085**2
    way = cheapest_way(ahead, slots, options, goal, COST, "n0")
    assert way[-1].mu_variance <= goal
    assert all(step.mu_variance > goal for step in way[:-1])
    assert ahead.mu_variance == untouched


def test_way_is_empty_when_the_goal_is_reached() -> None:
    ahead, slots, options = small_choice()
    assert cheapest_way(ahead, slots, options, 1.0, COST, "n0") == []


def test_way_ends_where_nothing_helps_any_more() -> None:
    ahead, slots, options = small_choice()
    way = cheapest_way(ahead, slots, options, 0.0, COST, "n0")
    assert 0 < len(way) <= 40


def test_schedule_counts_every_overhead_once() -> None:
    ahead, slots, options = small_choice()
    way = cheapest_way(ahead, slots, options, 0.0, COST, "n0")
    now, later = scheduled(ahead, slots, way, COST, "n0")
    for night in {slots[step.slot].night for step in now + later}:
        mine = [step for step in now + later if slots[step.slot].night == night]
        shutter = sum(step.option.n * (step.option.exposure_s + 10.0) for step in mine)
        assert 60.0 * sum(step.minutes for step in mine) == pytest.approx(90.0 + 15.0 * len(mine) + shutter)
    assert sorted(slots[step.slot].mjd for step in later) == [slots[step.slot].mjd for step in later]
    assert all(np.diff([step.mu_variance for step in now + later]) < 0)


def test_waiting_pays_when_the_later_night_tells_more() -> None:
    """With everything near maximum known, the decline and the second maximum are what is missing."""
    plan = planned(seen(last=3.0), 3.0)
    assert plan.later
    phases = [(one.mjd - T_MAX) / 1.02 for one in plan.later]
    assert max(phases) > 8.0


def test_rather_now_when_coming_nights_are_seldom_clear() -> None:
    cloudy = planned(seen(), 12.0, cost=COST.model_copy(update={"clear_chance": 0.05}))
    assert cloudy.tonight


def test_nothing_useful_when_the_goal_is_met() -> None:
    plan = planned(seen("BVRI", 30.0, 0.01), 31.0)
    assert plan.tonight == ()
    assert plan.sentence.startswith("nothing useful tonight: μ is good to")


def test_nothing_useful_when_too_faint_to_see() -> None:
    blind = telescope(aperture_m=0.05, bands={
        band: one.__class__(9.0, 0.2, one.dark_sky, 0.0, 0.01, 120.0, 3) for band, one in telescope().bands.items()
    })  # fmt: skip
    plan = planned(seen(), 10.0, noise=blind)
    assert plan.tonight == plan.later == ()
    assert "too faint" in plan.sentence


def test_no_advice_for_what_is_no_type_ia() -> None:
    curve = seen("BV", 25.0)
    odd = np.where(np.arange(len(curve)) % 2 == 0, 0.9, -0.9)
    plan = planned(replace(curve, mag=curve.mag + odd, flux=10 ** (-0.4 * (curve.mag + odd - 25.0))), 26.0)
    assert plan.tonight == plan.later == ()
    assert plan.sentence == "no advice: no normal type Ia varies like this."


def test_past_the_model_is_said() -> None:
    plan = planned(seen(), 100.0, nights=5)
    assert plan.tonight == plan.later == plan.candidates == ()
    assert "past the light-curve model" in plan.sentence


def test_without_a_fit_the_first_points_are_blue_and_visual() -> None:
    few = simulated(TRUTH, bands="B", phases=[-8.0])
    point = Point("Lantern 7", None, NIGHT, "B", float(few.mjd[0]), None, float(few.mag[0]), 0.02, 0, 0, 1, 1, "kept")
    mjd = T_MAX - 7.0
    plan = supernova_plan(
        target(), good_night(mjd), None, None, (point,), telescope(), dark_hours(NIGHT, mjd), COST
    )  # fmt: skip
    assert [one.band for one in plan.tonight] == ["B", "V"]
    assert all(one.mu_err is None for one in plan.tonight)
    assert plan.tonight[0].snr == pytest.approx(40, rel=0.2)


def test_errors_fall_along_the_list_to_the_goal() -> None:
    plan = planned(seen(), 12.0)
    errors = [one.mu_err for one in (*plan.tonight, *plan.later)]
    assert errors == sorted(errors, reverse=True)
    assert errors[-1] <= COST.mu_err_goal + 0.003


@pytest.mark.parametrize(
    ("band", "phase", "parameter", "words"),
    [
        ("I", 25.2, 3, "I at +25 d: second maximum fixes Δm15"),
        ("B", 15.0, 3, "B at +15 d: decline fixes Δm15"),
        ("V", 2.0, 1, "V at +2 d: colour fixes the host's dust"),
        ("B", -3.0, 2, "B at -3 d: fixes the time of maximum"),
        ("R", 5.0, 0, "R at +5 d: averages its scatter"),
    ],
)
def test_reasons(band: str, phase: float, parameter: int, words: str) -> None:
    assert reason(band, phase, parameter) == words


def test_what_is_settled_is_what_became_known() -> None:
    before = np.diag([0.02, 0.01, 0.2, 0.05])
    before[0, 3] = before[3, 0] = 0.02
    after = before.copy()
    after[3, 3], after[0, 3], after[3, 0], after[0, 0] = 0.01, 0.004, 0.004, 0.0136
    assert settled(before, after) == 3
    assert settled(before, before * np.diag([0.9, 1, 1, 1])) == 0


def test_decline_of_b_two_weeks_after_maximum_is_named() -> None:
    plan = planned(seen(last=3.0), 14.0, nights=3)
    mine = [one for one in (*plan.tonight, *plan.candidates) if one.band == "B"]
    assert any("Δm15" in one.reason for one in mine)


# ---- pulsating stars -------------------------------------------------------------------------------------


def test_widest_gap_goes_round_phase_zero() -> None:
    assert widest_gap([0.1, 0.3, 0.5, 0.7]) == pytest.approx((0.7, 0.4))
    assert widest_gap([]) == (0.0, 1.0)


def test_nearest_to_the_middle_of_a_gap() -> None:
    assert nearest_to_gap([0.2, 0.95, 0.5], 0.7, 0.4) == (1, True)
    assert nearest_to_gap([0.2, 0.5], 0.7, 0.4) == (0, False)


def pulsating(period_d: float, coverage_to: float, kind="cepheid"):
    epoch = 60000.0
    star = Target("Umber c", kind, 190.0, 15.0)
    points = tuple(
        Point("Umber c", None, "n", band, epoch + (k + phase) * period_d, None, 15.0, 0.02, 0, 0, 1, 1, "kept")
        for band in "VI" for k, phase in enumerate(np.arange(0.0, coverage_to, 0.04))
    )  # fmt: skip
    mean = BandMean("V", 15.0, 0.01, 0.02, 0.8, len(points), 4, 1 - coverage_to, True)
    pulse = Pulsation(period_d, 0.001, "fundamental", epoch + 2400000.5, coverage_to, (), (mean,))
    estimate = Estimate("Umber c", kind, None, None, None, None, None, None, None, None, None, None, 9, "", "",
                        pulsation=pulse)  # fmt: skip
    return star, points, estimate


def test_pulsating_star_is_observed_in_its_gap() -> None:
    star, points, estimate = pulsating(5.0, 0.6)
    in_gap, outside = 60000.0 + 41 * 5.0 + 0.8 * 5.0, 60000.0 + 41 * 5.0 + 0.3 * 5.0
    plan = pulsator_plan(star, good_night(in_gap), estimate, points, telescope(), dark_hours(NIGHT, in_gap), COST)
    assert [one.band for one in plan.tonight] == ["V", "I"]
    assert "phase 0.80" in plan.tonight[0].reason
    plan = pulsator_plan(star, good_night(outside), estimate, points, telescope(), dark_hours(NIGHT, outside), COST)
    assert plan.tonight == ()
    assert plan.sentence.startswith("nothing useful tonight")


def test_well_covered_star_needs_nothing() -> None:
    star, points, estimate = pulsating(5.0, 1.0)
    plan = pulsator_plan(star, good_night(61000.0), estimate, points, telescope(), dark_hours(NIGHT, 61000.0), COST)
    assert plan.tonight == ()


def test_exposure_that_smooths_a_fast_star_is_said() -> None:
    star, points, estimate = pulsating(0.05, 0.6, "rr_lyrae")
    mjd = 60000.0 + 0.05 * 4000.8
    plan = pulsator_plan(star, good_night(mjd), estimate, points, telescope(), dark_hours(NIGHT, mjd), COST)
    slow = [one for one in plan.tonight if one.n * one.exposure_s > 0.02 * 0.05 * 86400]
    assert all("smooths" in one.reason for one in slow)
    assert plan.tonight


# ---- against fixed cadences ------------------------------------------------------------------------------


@pytest.mark.slow
def test_advice_costs_less_time_than_a_set_every_second_night() -> None:
    """A subset of the scenario's seeds; the whole of it is run by hand (tests/advice_scenarios.py)."""
    rows = [
        advice_scenarios.follow(seed, way)
        for seed in advice_scenarios.SCENARIO["seeds"][:6]
        for way in ("advice", "every_second_night")
    ]
    found = advice_scenarios.summary(rows)
    assert found["advice"]["reached"] == 6
    assert found["advice"]["mean_minutes"] < 0.8 * found["every_second_night"]["mean_minutes"]
    assert found["advice"]["rms_error"] < 2.0 * advice_scenarios.SCENARIO["goal_mag"]
