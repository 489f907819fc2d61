"""A table whose cursor stays on its row while rows arrive, change and go."""

from __future__ import annotations

from collections.abc import Sequence

from rich.text import Text
from textual.widgets import DataTable

Cells = tuple[Text, ...]


def cell(text: object, style: str = "", right: bool = False) -> Text:
    """One cell; never parsed as markup."""
    return Text(str(text), style=style, no_wrap=True, justify="right" if right else "left")


class RowTable(DataTable[Text]):
    """A row-wise table that is told its whole content and changes only what differs.

    With ``follow_end`` a cursor on the last row goes on to the new last row; elsewhere nothing moves it.
    """

    def __init__(
        self, *columns: str, start_at_end: bool = False, follow_end: bool = False, id: str | None = None
    ) -> None:
        super().__init__(cursor_type="row", id=id, cell_padding=1)
        self._names = columns
        self._start_at_end = start_at_end
        self._follow_end = follow_end
        self._shown: dict[str, Cells] = {}

    def on_mount(self) -> None:
        """Make the columns."""
        for name in self._names:
            self.add_column(name, key=name)

    def show(self, rows: Sequence[tuple[str, Cells]]) -> None:
        """Show these rows (key, cells); append and change in place where possible."""
        wanted = dict(rows)
        old = list(self._shown)
        first = not old
        at_end = self._follow_end and bool(old) and self.chosen() == old[-1]
        if list(wanted)[: len(old)] == old:
            for key in old:
                for name, before, now in zip(self._names, self._shown[key], wanted[key], strict=True):
                    if before != now or before.spans != now.spans or before.style != now.style:
                        self.update_cell(key, name, now, update_width=True)
            for key in list(wanted)[len(old) :]:
                self.add_row(*wanted[key], key=key)
        else:
            self._rebuild(wanted)
        self._shown = wanted
        if wanted and (at_end or (first and self._start_at_end)):
            # only after the layout does the table know how far it can scroll
            self.call_after_refresh(self.move_cursor, row=len(wanted) - 1, animate=False)

    def _rebuild(self, wanted: dict[str, Cells]) -> None:
        chosen, top = self.chosen(), self.scroll_offset.y
        self.clear()
        for key, cells in wanted.items():
            self.add_row(*cells, key=key)
        if chosen in wanted:
            self.move_cursor(row=self.get_row_index(chosen), animate=False, scroll=False)
        self.scroll_to(y=top, animate=False, immediate=True)

    def chosen(self) -> str:
        """Key of the row under the cursor, "" in an empty table."""
        if not self.is_valid_coordinate(self.cursor_coordinate):
            return ""
        return self.coordinate_to_cell_key(self.cursor_coordinate).row_key.value or ""
