"""Writing the difference leaves the terminal as if everything had been written."""

import pyte
from fake_desk import FakeDesk
from hypothesis import given
from hypothesis import strategies as st
from on_screen import settle
from rich.color import ColorSystem

from tui.app import FadelineApp
from tui.widgets.delta import GAP, Row, _apply, changed_runs, row_of_cells, written

WIDTH, HEIGHT = 80, 24
MOVE = "\x1b[24;80H"


def rows_of(app: FadelineApp) -> list[Row]:
    strips = app.screen._compositor.render_strips()
    return [row_of_cells(strip, ColorSystem.EIGHT_BIT) for strip in strips]


def terminal() -> tuple[pyte.Screen, pyte.Stream]:
    screen = pyte.Screen(WIDTH, HEIGHT)
    return screen, pyte.Stream(screen)


def same(one: pyte.Screen, two: pyte.Screen) -> bool:
    return all(one.buffer[y][x] == two.buffer[y][x] for y in range(HEIGHT) for x in range(WIDTH))


async def test_every_state_of_the_app_is_equal_to_a_full_drawing() -> None:
    kept, kept_stream = terminal()
    last: list[Row | None] = [None] * HEIGHT
    app = FadelineApp(FakeDesk())
    walk = "1 2 up k pageup 3 s b 4 left x p 5 6 n escape question_mark escape ctrl+p d escape "
    walk += "right_square_bracket 1 escape 2"
    sent: dict[str, int] = {}
    async with app.run_test(size=(WIDTH, HEIGHT)) as pilot:
        await settle(pilot)
        for key in walk.split():
            await pilot.press(key)
            await settle(pilot)
            rows = rows_of(app)
            runs = [(y, x, cells) for y, row in enumerate(rows) for x, cells in changed_runs(last[y], row)]
            text = written(runs)
            kept_stream.feed(text)
            last = list(rows)
            fresh, fresh_stream = terminal()
            full = written([(y, 0, row) for y, row in enumerate(rows)])
            fresh_stream.feed(full)
            assert same(kept, fresh), key
            sent[key] = len(text)
            assert len(text) <= len(full) + HEIGHT * len(MOVE) * WIDTH // GAP
    assert sent["up"] < 1000, "a row, its details and its picture; a full drawing was 5 kB, now it is 4"


async def test_a_frame_without_change_costs_nothing() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(WIDTH, HEIGHT)) as pilot:
        await settle(pilot)
        rows = rows_of(app)
        assert written((y, x, c) for y, row in enumerate(rows) for x, c in changed_runs(row, list(row))) == ""


CELL = st.one_of(
    st.tuples(
        st.sampled_from("ab "),
        st.sampled_from(
            [
                "",
                "31",
                "1;32",
                "38;5;245;48;5;232",
                "38;5;250;48;5;232",
                "1;38;5;250;48;5;232",
                "48;5;240",
                "97;104",
                "38;2;1;2;3;48;2;4;5;6",
                "7;38;2;1;2;3",
                "39;49",
                "1;7;38;5;251;48;5;16",
                "3;4;38;5;251;48;5;16",
                "2;38;5;251;48;5;16",
            ]
        ),
    ).map(lambda cell: [cell]),
    st.sampled_from(["", "31"]).map(lambda codes: [("星", codes), ("", codes)]),
)
ROW = st.lists(CELL, min_size=20, max_size=20).map(lambda cells: [c for cell in cells for c in cell][:20])


def _whole(row: Row) -> Row:
    """A row cut to its length must not end with half a wide character."""
    return [*row[:-1], (" ", "")] if row[-1][0] == "星" else row


@given(ROW.map(_whole), ROW.map(_whole))
def test_any_row_becomes_any_other_also_with_wide_characters(old: Row, new: Row) -> None:
    runs = list(changed_runs(old, new))
    assert _apply(old, runs, len(new)) == new
    for x, cells in runs:
        assert cells[0][0] != "", "a run must not begin inside a wide character"
        assert x + len(cells) <= len(new)
    kept, fresh = pyte.Screen(20, 1), pyte.Screen(20, 1)
    pyte.Stream(kept).feed(written([(0, 0, old)]) + written((0, x, c) for x, c in runs))
    pyte.Stream(fresh).feed(written([(0, 0, new)]))
    assert kept.display == fresh.display
    anew, plainly = pyte.Screen(20, 1), "".join(f"\x1b[0;{codes}m{character}" for character, codes in new)
    pyte.Stream(anew).feed(plainly.replace(";m", "m"))
    assert all(kept.buffer[0][x] == anew.buffer[0][x] for x in range(20)), "colours too"


async def test_a_frame_that_fails_goes_textuals_own_way(monkeypatch) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(WIDTH, HEIGHT)) as pilot:
        await settle(pilot)
        monkeypatch.setattr(type(app), "is_headless", property(lambda self: False))
        monkeypatch.setattr(app, "_difference", lambda screen: 1 / 0)
        await pilot.press("2")
        for _ in range(20):
            await pilot.pause()
        assert "ZeroDivisionError" in app.delta_trouble
        monkeypatch.undo()
        await settle(pilot)
        assert app.current_mode == "frames"


def test_it_can_be_switched_off_by_hand(monkeypatch) -> None:
    monkeypatch.setenv("FADELINE_DELTA", "0")
    assert FadelineApp(FakeDesk()).delta_trouble == "switched off"
