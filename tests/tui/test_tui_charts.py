"""Charts that answer: bands on and off, days nearer and farther, residuals against what may be wrong."""

import math
from dataclasses import replace

import numpy as np
import pytest
from fake_desk import BANDS, FakeDesk, invented_snapshot, invented_stars
from on_screen import screen_text, settle
from rich.color import ColorSystem

from reduce.records import Target
from reduce.views import SequenceStar
from tui.app import FadelineApp
from tui.screens.field import AGAINST, offsets_arcmin, residual_marks
from tui.widgets.chart import Chart
from tui.widgets.delta import changed_runs, row_of_cells, written
from tui.widgets.raster import Line, Marks, limits_of

# ---- on numbers ------------------------------------------------------------------------------------------


def test_within_limits_of_x_only_what_is_there_sets_the_limits_of_y() -> None:
    marks = Marks("V", "", [1.0, 5.0, 9.0], [15.0, 16.0, 20.0], [0.1, 0.1, 0.1], "VVV")
    curve = Line("", [0.0, 5.0, 10.0], [15.0, 16.0, 30.0])
    near = limits_of([marks], [curve], 0.02, (4.0, 6.0))
    assert (near.x0, near.x1) == (4.0, 6.0)
    assert 15.8 < near.y0 < 15.9
    assert 16.1 < near.y1 < 16.2
    assert limits_of([marks], [], 0.02, (100.0, 200.0)).x0 == 100.0, "nothing there is no reason to show elsewhere"


def test_residuals_hang_on_what_they_are_drawn_against() -> None:
    stars = [s for s in invented_stars() if s.band == "V"]
    marks = residual_marks(stars, lambda s: s.catalogue_mag)
    assert [m.label for m in marks] == ["o used", "- spare", "x set aside"]
    pairs = {(x, y) for m in marks for x, y in zip(m.x, m.y, strict=True)}
    assert pairs == {(s.catalogue_mag, s.residual_mag) for s in stars}
    assert residual_marks(stars, lambda s: None) == [], "a star without a place is not drawn at 0"


def test_offsets_are_east_and_north_on_the_sky_also_across_zero_hours() -> None:
    """One minute of right ascension is 15 arcmin at the equator, half of it at 60 degrees."""
    target = Target("x", "type_ia", 359.9, 60.0)
    east, north = offsets_arcmin(SequenceStar("a", 0.15, 60.1, {}), target)
    assert east == pytest.approx(0.25 * 60 * math.cos(math.radians(60.0)))
    assert north == pytest.approx(6.0)


# ---- on the screen ---------------------------------------------------------------------------------------


async def curve_screen(pilot, *keys: str) -> Chart:
    await settle(pilot)
    await pilot.press("4", *keys)
    await settle(pilot)
    return pilot.app.screen.query_one("#curve", Chart)


def shown_bands(chart: Chart) -> list[str]:
    return [marks.label for marks in chart._marks]


async def test_the_letter_of_a_band_hides_and_shows_it() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        chart = await curve_screen(pilot, "V", "I")
        assert shown_bands(chart) == ["B", "R"]
        assert "mag, without V I" in screen_text(app)
        await pilot.press("V", "I")
        await settle(pilot)
        assert shown_bands(chart) == list(BANDS)
        await pilot.press("g")
        await settle(pilot)
        assert "There is no point in band g." in screen_text(app)
        for expected in (["B"], ["V"], ["R"], ["I"], list(BANDS)):
            await pilot.press("b")
            await settle(pilot)
            assert shown_bands(chart) == expected


async def test_the_excluded_point_is_the_one_under_the_cursor_also_among_hidden_bands() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await curve_screen(pilot, "B", "V", "I", "left", "x")
        await settle(pilot)
        assert desk.decisions == [("point:Vesna 7:2031-05-27:R", "exclude", "yes")]


async def test_days_are_halved_about_the_cursor_and_the_window_follows_it() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        chart = await curve_screen(pilot)
        whole = chart.limits()
        await pilot.press("left", "plus", "plus")
        await settle(pilot)
        near = chart.limits()
        assert near.x1 - near.x0 == pytest.approx((whole.x1 - whole.x0) / 4)
        newest = max(p.mjd for p in app.view.night_points)
        assert 0.5 * (near.x0 + near.x1) == pytest.approx(newest)
        assert near.y1 - near.y0 < whole.y1 - whole.y0
        residuals = app.screen.query_one("#residuals", Chart).limits()
        assert (residuals.x0, residuals.x1) == (near.x0, near.x1)
        await pilot.press(*["left"] * 20)
        await settle(pilot)
        moved = chart.limits()
        assert moved.x0 < chart._cursor[0] < moved.x1 < near.x1
        await pilot.press("0")
        await settle(pilot)
        assert chart.limits() == whole
        await pilot.press("minus")
        await settle(pilot)
        assert chart.limits() == whole, "there is nothing beyond all days"


async def test_the_residual_strip_is_symmetric_and_says_its_scale() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await curve_screen(pilot)
        chart = app.screen.query_one("#residuals", Chart)
        assert chart.limits().y0 == -chart.limits().y1
        height = chart.size.height
        strip = screen_text(app).splitlines()[chart.region.y : chart.region.y + height]
        numbers = [float(line.split("┤")[0]) for line in strip if "┤" in line]
        assert len(numbers) >= 2
        assert 0.0 in numbers


async def test_one_key_cycles_what_the_residuals_are_drawn_against() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("3")
        await settle(pilot)
        stars = {s.star: s for s in app.snapshot.stars if s.band == "V"}
        chart = app.screen.query_one("#residuals-against", Chart)
        seen = []
        for _ in AGAINST:
            seen.append(sorted(x for m in chart._marks for x in m.x))
            await pilot.press("c")
            await settle(pilot)
        place = [offsets_arcmin(s, app.view.target) for s in app.snapshot.sequence]
        expected = [
            [s.colour for s in stars.values()],
            [s.catalogue_mag for s in stars.values()],
            [east for east, _ in place],
            [north for _, north in place],
        ]
        for found, numbers in zip(seen, expected, strict=True):
            assert np.allclose(found, sorted(numbers))
        assert sorted(x for m in chart._marks for x in m.x) == seen[0]


async def test_a_star_that_is_not_in_the_sequence_any_more_has_no_place() -> None:
    snapshot = invented_snapshot()
    app = FadelineApp(FakeDesk(replace(snapshot, sequence=snapshot.sequence[:3])))
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("3", "c", "c")
        await settle(pilot)
        chart = app.screen.query_one("#residuals-against", Chart)
        assert sum(len(m.x) for m in chart._marks) == 3


async def test_a_replot_fits_six_kilobytes_and_the_cursor_two_hundred_bytes() -> None:
    """The bounds of the terminal app at 80x24 in 256 colours."""
    app = FadelineApp(FakeDesk())

    def rows():
        strips = app.screen._compositor.render_strips()
        return [row_of_cells(strip, ColorSystem.EIGHT_BIT) for strip in strips]

    def cost(old, new) -> int:
        return len(written((y, x, c) for y, row in enumerate(new) for x, c in changed_runs(old[y], row)).encode())

    async with app.run_test(size=(80, 24)) as pilot:
        await curve_screen(pilot, "left")
        before = rows()
        for key in ("V", "plus", "0", "V", "b", "b", "b", "b", "b"):
            await pilot.press(key)
            await settle(pilot)
            after = rows()
            assert 0 < cost(before, after) <= 6000, key
            before = after
        moves = []
        for _ in range(8):
            await pilot.press("left")
            await settle(pilot)
            moves.append(cost(before, before := rows()))
        assert sorted(moves)[len(moves) // 2] <= 200, moves
