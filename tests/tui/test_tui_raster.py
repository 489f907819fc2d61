"""Charts say what the numbers say."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tui.widgets.raster import Canvas, Limits, Line, Marks, limits_of, ticks

NUMBER = st.one_of(st.floats(-1e6, 1e6), st.just(math.nan))


def mark(x: list[float], y: list[float], err: list[float] | None = None) -> Marks:
    return Marks("V", "", x, y, err, "V" * len(x))


@given(st.lists(st.tuples(NUMBER, NUMBER, NUMBER), max_size=12), st.booleans(), st.booleans())
def test_any_points_can_be_drawn_and_finite_ones_are_inside(rows, plain, invert) -> None:
    marks = mark([r[0] for r in rows], [r[1] for r in rows], [abs(r[2]) for r in rows])
    limits = limits_of([marks], [], 0.02)
    assert limits.x1 > limits.x0
    assert limits.y1 > limits.y0
    canvas = Canvas(40, 10, limits, invert_y=invert, plain=plain)
    canvas.bars(marks, 0)
    canvas.markers(marks, 0)
    for (row, column), (x, y, _) in zip(canvas.cells_at(marks.x, marks.y), rows, strict=True):
        assert (row >= 0) == (math.isfinite(x) and math.isfinite(y))
        if row >= 0:
            assert canvas.cells().code[row, column] == ord("V")


def test_bright_is_up_when_inverted() -> None:
    canvas = Canvas(20, 10, Limits(0, 1, 12, 16), invert_y=True, plain=False)
    (bright, _), (faint, _) = canvas.cells_at([0.5, 0.5], [12.1, 15.9])
    assert (bright, faint) == (0, 9)


def test_limits_hold_error_bars_but_not_the_error_of_a_missing_point() -> None:
    """A NaN point with a huge error must not widen the axis, nor lend its error to its neighbour."""
    marks = mark([1.0, 2.0, 3.0], [15.0, math.nan, 15.2], [0.1, 50.0, 0.1])
    limits = limits_of([marks], [], 0.02)
    assert 14.8 < limits.y0 < 14.9
    assert 15.3 < limits.y1 < 15.4


def test_error_bar_has_the_length_of_the_error() -> None:
    marks = mark([0.5], [10.0], [2.0])
    canvas = Canvas(11, 21, Limits(0, 1, 0, 20), invert_y=False, plain=True)
    canvas.bars(marks, 0)
    assert np.flatnonzero(canvas.cells().code[:, 5] == ord("|")).tolist() == [8, 9, 10, 11, 12]


def test_curve_has_no_gaps_and_stays_in_its_range() -> None:
    x = np.linspace(0.2, 0.8, 30)
    canvas = Canvas(40, 10, Limits(0, 1, -1, 1), invert_y=False, plain=True)
    canvas.line(Line("", x, np.sin(9 * x)), 3)
    columns = np.flatnonzero((canvas.cells().owner == 3).any(axis=0))
    assert np.all(np.diff(columns) == 1)
    assert columns[0] >= 0.2 * 39 - 1
    assert columns[-1] <= 0.8 * 39 + 1


@given(st.floats(-1e5, 1e5), st.floats(1e-3, 1e5), st.integers(1, 12))
def test_ticks_are_even_inside_and_not_too_many(low: float, span: float, wanted: int) -> None:
    values, decimals = ticks(low, low + span, wanted)
    assert 2 <= len(values) <= max(wanted + 1, 5), "one alone does not say the scale"
    assert all(low - 1e-6 * span <= v <= low + span * (1 + 1e-6) for v in values)
    texts = [f"{v:.{decimals}f}" for v in values]
    assert len(set(texts)) == len(texts)


def test_nothing_to_draw_has_limits_all_the_same() -> None:
    assert limits_of([], [], 0.1) == Limits(0.0, 1.0, 0.0, 1.0)
    assert limits_of([mark([math.nan], [math.nan])], [], 0.1) == Limits(0.0, 1.0, 0.0, 1.0)


def test_curve_far_away_in_time_does_not_squeeze_the_points() -> None:
    far = Line("", [0.0, 10.0, 400.0], [15.0, 15.0, 25.0])
    limits = limits_of([mark([1.0, 9.0], [15.0, 15.1])], [far], 0.02)
    assert limits.y1 == pytest.approx(15.1, abs=0.02)
