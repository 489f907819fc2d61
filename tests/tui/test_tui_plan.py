"""The Plan screen: asked for once, drawn whole, cautions until they are read."""

from dataclasses import replace

import pytest
from fake_desk import FakeDesk, invented_snapshot
from invented_plan import invented_plan
from on_screen import screen_text, settle

from reduce.plain_text import PlainError
from tui.actions import SCREENS
from tui.app import FadelineApp
from tui.screens import plan as plan_screen
from tui.screens.plan import altitude_lines, altitude_marks, hours_of

KEY = str(list(SCREENS).index("plan") + 1)


async def at_plan(pilot) -> None:
    await settle(pilot)
    await pilot.press(KEY)
    await settle(pilot)


async def test_advice_stands_there_with_reason_and_cost() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await at_plan(pilot)
        text = screen_text(app)
        assert "I at +21 d: second maximum fixes Δm15" in text
        assert "3 × 110 s" in text
        assert "the error of μ falls from 0.139 to about 0.129" in text
        assert "due: last point 3.1 d ago" in text


async def test_another_target_has_its_own_sentence() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await at_plan(pilot)
        await pilot.press("right_square_bracket")
        await settle(pilot)
        text = screen_text(app)
        assert "Liskova 2: nothing useful tonight" in text
        assert "second maximum" not in text


async def test_cautions_stay_until_they_are_hidden() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await at_plan(pilot)
        assert "38° from the Sun" in screen_text(app)
        await pilot.press("escape")
        await settle(pilot)
        assert "38° from the Sun" not in screen_text(app)
        await pilot.press("1", KEY)
        await settle(pilot)
        assert "38° from the Sun" not in screen_text(app)


async def test_hiding_the_line_of_tonight_hides_no_caution_here() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("escape", KEY)
        await settle(pilot)
        assert "38° from the Sun" in screen_text(app)


async def test_refusal_stands_in_the_plan_s_place() -> None:
    desk = FakeDesk()
    desk.refuse["plan"] = PlainError("A plan needs the site.")
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await at_plan(pilot)
        assert "A plan needs the site." in screen_text(app)


async def test_plan_is_made_once_while_frames_keep_landing(monkeypatch: pytest.MonkeyPatch) -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await at_plan(pilot)
        desk.change()
        app._nudge.set()
        await settle(pilot)
        assert desk.plans_made == 1
        monkeypatch.setattr(plan_screen, "LEAST_AGE_S", -1.0)
        desk.change()
        app._nudge.set()
        await settle(pilot)
        assert desk.plans_made == 2


async def test_no_plan_is_made_before_it_is_looked_at() -> None:
    desk = FakeDesk()
    async with FadelineApp(desk).run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "5", "1")
        await settle(pilot)
        assert desk.plans_made == 0


def test_hours_are_those_of_the_clock() -> None:
    plan = invented_plan(invented_snapshot())
    hours = hours_of(plan)
    for hour, mjd in zip(hours, plan.mjd, strict=True):
        assert hour % 24.0 == pytest.approx((mjd % 1.0) * 24.0, abs=1e-6)
    assert hours == sorted(hours)


def test_letters_stand_where_a_target_can_be_observed() -> None:
    plan = invented_plan(invented_snapshot())
    marks = {mark.label: mark for mark in altitude_marks(plan)}
    first = plan.targets[0].night.window
    assert first is not None
    hours = dict(zip(hours_of(plan), plan.mjd, strict=True))
    assert marks["A Vesna 7"].x
    assert all(first[0] <= hours[x] <= first[1] for x in marks["A Vesna 7"].x)
    assert marks["C Korab b"].x == []


def test_nothing_is_drawn_below_the_horizon() -> None:
    plan = invented_plan(invented_snapshot())
    for line in altitude_lines(plan, "Vesna 7"):
        assert not any(y < 0 for y in line.y)
    set_moon = replace(plan, moon_altitude_deg=tuple(-5.0 for _ in plan.mjd))
    assert next(m for m in altitude_marks(set_moon) if m.label.startswith("m Moon")).x == []
