"""Log: everything that was noted, decided and seen; it only grows."""

from __future__ import annotations

import asyncio
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.widgets import DataTable, Input, Label, Static

from tui.actions import screen_bindings
from tui.messages import trouble_sentence
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from textual.events import Key

    from reduce.views import LogRow, Snapshot, TargetView


class LogScreen(CampaignScreen):
    """The observing log with a line to write and a line to search."""

    MODE = "log"
    BINDINGS: ClassVar = screen_bindings("log")

    def __init__(self) -> None:
        super().__init__()
        self._rows: dict[str, LogRow] = {}
        self._found: tuple[LogRow, ...] | None = None

    def body(self) -> ComposeResult:
        """Entries, the chosen one in full, the two lines."""
        yield RowTable("when (UTC)", "what", "target", "who", "words", start_at_end=True, follow_end=True, id="log")
        yield Static("", id="entry")
        with Vertical(id="log-inputs"):
            for name, hint in (
                ("note", "n: write, enter stores it, esc leaves"),
                ("search", "/: words, enter searches"),
            ):
                with Horizontal():
                    yield Label(name.capitalize())
                    box = Input(placeholder=hint, id=name, compact=True)
                    box.cursor_blink = False
                    yield box

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the log, or what was found in it."""
        rows = snapshot.log if self._found is None else self._found
        self._rows = {row.id: row for row in rows}
        self.query_one(RowTable).show([(row.id, _cells(row)) for row in rows])
        self._show_entry()

    @on(DataTable.RowHighlighted)
    def follow_cursor(self) -> None:
        """The entry in full belongs to the row under the cursor."""
        self._show_entry()

    def _show_entry(self) -> None:
        row = self._rows.get(self.query_one(RowTable).chosen())
        if row is None:
            words = "Nothing found." if self._found is not None else "The log is empty."
            self.query_one("#entry", Static).update(Text(words))
            return
        text = Text.assemble((f"{row.at}  {row.night}  {row.kind}  {row.target}  {row.who}\n", "dim"), row.body)
        self.query_one("#entry", Static).update(text)

    def begin_note(self) -> None:
        """Put the cursor into the line for a note."""
        self.call_after_refresh(lambda: self.query_one("#note", Input).focus())

    def action_search(self) -> None:
        """Put the cursor into the search line."""
        self.query_one("#search", Input).focus()

    def on_key(self, event: Key) -> None:
        """Escape leaves a line; from elsewhere it ends a search: the whole log is shown again."""
        if event.key != "escape" or not (isinstance(self.focused, Input) or self._found is not None):
            return
        event.stop()
        if not isinstance(self.focused, Input) or self.focused.id == "search":
            self.query_one("#search", Input).value = ""
            self._found = None
        self.query_one(RowTable).focus()
        self.draw()

    @on(Input.Submitted, "#note")
    def store_note(self, event: Input.Submitted) -> None:
        """Append the note."""
        body, target, desk = event.value.strip(), self.fadeline.target_name, self.fadeline.desk
        if not body:
            self.fadeline.say("An empty note is not stored.")
            return
        event.input.value = ""
        self.query_one(RowTable).focus()

        def what() -> str:
            desk.note(target, body)
            return "Noted."

        self.fadeline.write(what)

    @on(Input.Submitted, "#search")
    def start_search(self, event: Input.Submitted) -> None:
        """Search in a thread; no words show the whole log."""
        self.run_worker(self._search(event.value.strip()), group="search", exclusive=True, exit_on_error=False)
        self.query_one(RowTable).focus()

    async def _search(self, words: str) -> None:
        try:
            self._found = await asyncio.to_thread(self.fadeline.desk.search_log, words) if words else None
        except Exception as error:  # a query the index cannot take is a sentence
            self.fadeline.say(trouble_sentence(error), trouble=True)
            return
        self.draw()


def _cells(row: LogRow) -> Cells:
    return (
        cell(row.at[:16].replace("T", " ")), cell(row.kind), cell(row.target), cell(row.who), cell(row.body)
    )  # fmt: skip
