"""Setup: everything that is said about observatory, targets and comparison stars, changed where it stands."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal
from textual.widgets import DataTable, Input, Label, Static

from tui.actions import screen_bindings
from tui.band_look import word_colour
from tui.messages import trouble_sentence
from tui.screens.campaign_screen import CampaignScreen
from tui.screens.choice import ChoiceScreen
from tui.setup_rows import NEW_TARGET, UNSET, SetupRow, setup_rows
from tui.widgets.path_input import PathInput
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from textual.events import Key

    from reduce.views import Snapshot, TargetView


_LONG = 30
"""Values longer than this may be cut in the table; they stand whole below it."""


class SetupScreen(CampaignScreen):
    """One table of what is set, and one line to change it."""

    MODE = "setup"
    BINDINGS: ClassVar = screen_bindings("setup")

    def __init__(self) -> None:
        super().__init__()
        self._rows: dict[str, SetupRow] = {}
        self._editing: SetupRow | None = None
        self._before: list[tuple[str, str]] = []
        """Subject and value of what was changed here, newest last."""

    def body(self) -> ComposeResult:
        """The table, what the row means, the line."""
        yield RowTable("section", "what", "value", id="setup")
        yield Static("", id="setup-help")
        with Horizontal(id="setup-line"):
            yield Label("Value", id="setup-label")
            yield PathInput(id="setup-input", placeholder="enter on a row changes it")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw what is set."""
        rows = setup_rows(snapshot)
        self._rows = {row.subject: row for row in rows}
        cells, section = [], ""
        for row in rows:
            cells.append((row.subject, _cells(row, row.section != section)))
            section = row.section
        self.query_one(RowTable).show(cells)
        self._show_help()

    # ---- the row under the cursor ------------------------------------------------------------------------

    @on(DataTable.RowHighlighted)
    def follow_cursor(self) -> None:
        """The words below belong to the row under the cursor."""
        self._show_help()

    def _chosen(self) -> SetupRow | None:
        return self._editing or self._rows.get(self.query_one(RowTable).chosen())

    def _show_help(self) -> None:
        row, words = self._chosen(), Text()
        if row is not None:
            words = Text.assemble((f"{row.section}, {row.label}: ", "bold"), row.help)
            for whole in (row.value if len(row.value) > _LONG else "", row.remark):
                if whole:
                    words.append(f"\n{whole}", "dim")
        self.query_one("#setup-help", Static).update(words)

    def action_next_section(self) -> None:
        """Go to the first row of the next section."""
        table, subjects = self.query_one(RowTable), list(self._rows)
        chosen = table.chosen()
        if chosen not in subjects:
            return
        place = subjects.index(chosen)
        here = self._rows[chosen].section
        later = (k for k in range(place, len(subjects)) if self._rows[subjects[k]].section != here)
        table.move_cursor(row=next(later, 0), animate=False)

    # ---- changing ----------------------------------------------------------------------------------------

    @on(DataTable.RowSelected)
    def change_row(self) -> None:
        """Enter on a row: a choice, the form of a target, or the line."""
        row = self._rows.get(self.query_one(RowTable).chosen())
        if row is None:
            return
        if row.subject == NEW_TARGET:
            self.action_add_target()
        elif row.choices:
            title = f"{row.section}, {row.label}"
            self.app.push_screen(ChoiceScreen(title, row.choices), lambda value: self._take_choice(row, value))
        else:
            self._editing = row
            line = self.query_one(PathInput)
            line.wanted, line.value = row.wanted, row.value
            self.query_one("#setup-label", Label).update(Text(row.label))
            line.focus()
            line.cursor_position = len(row.value)
            line.show_end()
            self._show_help()

    def _take_choice(self, row: SetupRow, value: str | None) -> None:
        if value is not None and value != row.value:
            self._store(row, value)

    @on(Input.Submitted, "#setup-input")
    def store_line(self, event: Input.Submitted) -> None:
        """Enter in the line: check, store, leave; what is refused stays to be mended."""
        event.stop()
        if self._editing is not None:
            self._store(self._editing, event.value.strip())

    @on(PathInput.Offered)
    def show_offers(self, event: PathInput.Offered) -> None:
        """What a path may go on with stands in the place of the help."""
        if event.names:
            self.query_one("#setup-help", Static).update(Text(event.names))
        else:
            self._show_help()

    def on_key(self, event: Key) -> None:
        """Escape leaves the line and changes nothing."""
        if event.key == "escape" and self._editing is not None:
            event.stop()
            self._leave_line()

    def _leave_line(self) -> None:
        self._editing = None
        line = self.query_one(PathInput)
        line.value, line.wanted = "", ""
        self.query_one("#setup-label", Label).update("Value")
        self.query_one(RowTable).focus()
        self._show_help()

    def _store(self, row: SetupRow, typed: str) -> None:
        self.run_worker(self._change(row.subject, typed, row.value), group="write", exit_on_error=False)

    async def _change(self, subject: str, typed: str, before: str | None) -> None:
        """Change it; ``before`` is what to put back later, None when this is the putting back."""
        try:
            words = await self.fadeline.desk.change_setup(subject, typed)
        except Exception as error:  # what was typed cannot be: the line stays
            self.fadeline.say(trouble_sentence(error), trouble=True)
            return
        if before is not None and subject != "sequence":
            self._before.append((subject, before))
        self.fadeline.say(words)
        if self._editing is not None and self._editing.subject == subject:
            self._leave_line()
        self.fadeline.look_again()

    def action_take_back(self) -> None:
        """Put the value changed last back."""
        if not self._before:
            self.fadeline.say("Nothing was changed here since the app was opened.")
            return
        subject, value = self._before.pop()
        self.run_worker(self._change(subject, value, None), group="write", exit_on_error=False)

    # ---- targets -----------------------------------------------------------------------------------------

    def action_add_target(self) -> None:
        """Ask for one more target."""
        from tui.screens.target_form import TargetForm

        self.app.push_screen(TargetForm(self.fadeline.desk.add_target), self._take_target)

    def _take_target(self, words: str | None) -> None:
        if words:
            self.fadeline.say(words)
            self.fadeline.look_again()


def _cells(row: SetupRow, first: bool) -> Cells:
    if row.section == "Filters" and not row.value:
        value = cell("no band", word_colour("wants you"))
    else:
        value = cell(row.value) if row.value or row.subject in (NEW_TARGET, "sequence") else cell(UNSET, "dim")
    if row.remark:
        value.append(f"  {row.remark}".removeprefix("  " if not value else ""), "dim")
    return cell(row.section if first else "", "bold"), cell(row.label), value
