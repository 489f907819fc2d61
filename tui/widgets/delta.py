"""Write only the cells that changed since the last frame (Textual repaints whole regions).

Written for Textual 8.2: it overrides the private ``App._display`` and reads ``Screen._compositor`` and
``Console._color_system``. Where they are not as expected, or a frame fails its self-check, the app goes on in
Textual's own way. ``FADELINE_DELTA=0`` in the environment switches it off by hand.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from functools import cache
from typing import TYPE_CHECKING, Any

from rich.cells import cell_len
from rich.color import ColorSystem
from textual._compositor import CompositorUpdate
from textual._context import visible_screen_stack
from textual.app import App

if TYPE_CHECKING:
    from textual.screen import Screen

Cell = tuple[str, str]
"""Character ("" in the second cell of a wide one) and its colour codes."""
Row = list[Cell]

GAP = 6
"""Writing this many unchanged cells again is cheaper than moving the cursor."""
_CHECKED_FRAMES = 25
_CHECK_EVERY = 50


def row_of_cells(segments: Iterable[Any], system: ColorSystem) -> Row:
    """Cells of one strip."""
    row: Row = []
    for text, style, control in segments:
        if control:
            continue
        codes = style._make_ansi_codes(system) if style else ""
        if text.isascii():
            row += [(character, codes) for character in text]
            continue
        for character in text:
            width = cell_len(character)
            if width:
                row += [(character, codes), *[("", codes)] * (width - 1)]
    return row


def changed_runs(old: Row | None, new: Row) -> Iterator[tuple[int, Row]]:
    """(column, cells) of what must be written to turn one row into the other."""
    if old is None or len(old) != len(new):
        yield 0, new
        return
    x = 0
    while x < len(new):
        if old[x] == new[x]:
            x += 1
            continue
        start = last = x
        x += 1
        while x < len(new) and x - last <= GAP:
            if old[x] != new[x]:
                last = x
            x += 1
        while start and (new[start][0] == "" or old[start][0] == ""):
            start -= 1
        while last + 1 < len(new) and (new[last + 1][0] == "" or old[last + 1][0] == ""):
            last += 1
        yield start, new[start : last + 1]
        x = last + 1


@cache
def _parts(codes: str) -> tuple[str, str, str]:
    """Attributes, colour of the letters and colour of the ground in the codes of one style."""
    attributes, letters, ground = [], "", ""
    numbers = codes.split(";") if codes else []
    while numbers:
        first = numbers.pop(0)
        length = {"5": 2, "2": 4}.get(numbers[0], 0) if first in ("38", "48") and numbers else 0
        whole = ";".join([first, *numbers[:length]])
        numbers = numbers[length:]
        if len(first) == 2 and first[0] in "39":
            letters = whole
        elif (len(first) == 2 and first[0] == "4") or (len(first) == 3 and first.startswith("10")):
            ground = whole
        else:
            attributes.append(whole)
    return ";".join(attributes), letters, ground


_OFF = {"1": "22", "2": "22", "3": "23", "4": "24", "7": "27", "9": "29"}
"""What ends an attribute (ECMA-48): bold and faint share theirs."""


@cache
def _change(old: str | None, new: str) -> str:
    """What turns one style into another: only what differs, or everything anew where that is shorter."""
    anew = f"\x1b[0;{new}m" if new else "\x1b[0m"
    if old is None:
        return anew
    (was_on, *was), (is_on, *now) = _parts(old), _parts(new)
    before, after = set(was_on.split(";")) - {""}, set(is_on.split(";")) - {""}
    ended = before - after
    if not ended <= set(_OFF) or any(one and not two for one, two in zip(was, now, strict=True)):
        return anew
    ends = {_OFF[one] for one in ended}
    begins = {one for one in after if one not in before or _OFF.get(one) in ends}
    codes = [*sorted(ends), *sorted(begins), *(two for one, two in zip(was, now, strict=True) if one != two)]
    return min(f"\x1b[{';'.join(codes)}m", anew, key=len) if codes else ""


def written(runs_of_rows: Iterable[tuple[int, int, Row]]) -> str:
    """Terminal text for runs (row, column, cells)."""
    out: list[str] = []
    codes_now: str | None = None
    for y, x, cells in runs_of_rows:
        out.append(f"\x1b[{y + 1};{x + 1}H")
        for character, codes in cells:
            if codes != codes_now:
                out.append(_change(codes_now, codes))
                codes_now = codes
            out.append(character)
    return "".join(out)


def _apply(row: Row | None, runs: Iterable[tuple[int, Row]], width: int) -> Row:
    result = list(row) if row is not None and len(row) == width else [(" ", "")] * width
    for x, cells in runs:
        result[x : x + len(cells)] = cells
    return result


class DeltaDisplay(App[None]):
    """An app that keeps the last frame and sends the difference."""

    delta_trouble: str = ""
    """Why the difference is not used, "" while it is."""

    def __init__(self) -> None:
        super().__init__()
        self._last_frame: list[Row | None] = []
        self._last_size: Any = None
        self._n_frames = 0
        if os.environ.get("FADELINE_DELTA") == "0":
            self.delta_trouble = "switched off"

    def forget_frame(self) -> None:
        """Write everything next time: the terminal may show something else by now."""
        self._last_frame = []

    def _display(self, screen: Screen[Any], renderable: Any) -> None:
        unfit = (
            self.delta_trouble
            or not isinstance(renderable, CompositorUpdate)
            or self._batch_count
            or not self._running
            or self._closed
            or self.is_headless
            or self._driver is None
            or self._driver.is_inline
            or screen is not self.screen
        )
        if unfit:
            super()._display(screen, renderable)
            return
        try:
            text = self._difference(screen)
        except Exception as error:  # private parts of another Textual: its own way still works
            self._give_up(f"{type(error).__name__}: {error}")
            return
        if text and self._driver is not None:
            x, y = self.screen.outer_size.clamp_offset(self.cursor_position)
            self._begin_update()
            self._driver.write(f"{text}\x1b[0m\x1b[{y + 1};{x + 1}H")
            self._end_update()
            self._driver.flush()
        self.post_display_hook()

    def _difference(self, screen: Screen[Any]) -> str:
        visible_screen_stack.set(self._background_screens)
        system = self.console._color_system or ColorSystem.TRUECOLOR  # as Strip.render does
        rows = [row_of_cells(strip, system) for strip in screen._compositor.render_strips()]
        if self._last_size != self.size or len(self._last_frame) != len(rows):
            self._last_frame, self._last_size = [None] * len(rows), self.size
        changes: list[tuple[int, int, Row]] = []
        check = self._n_frames < _CHECKED_FRAMES or self._n_frames % _CHECK_EVERY == 0
        self._n_frames += 1
        for y, (old, new) in enumerate(zip(self._last_frame, rows, strict=True)):
            if old == new:
                continue
            runs = list(changed_runs(old, new))
            if check and _apply(old, runs, len(new)) != new:
                raise RuntimeError("the difference of two frames is not their difference")
            changes += [(y, x, cells) for x, cells in runs]
        self._last_frame = list(rows)
        return written(changes)

    def _give_up(self, why: str) -> None:
        self.delta_trouble = why
        self.log.error(f"frame differencing switched off: {why}")
        self.screen.refresh(layout=True)
