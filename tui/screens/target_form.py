"""A window that asks for one more target."""

from __future__ import annotations

from collections.abc import Awaitable, Callable, Mapping
from typing import ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.binding import Binding
from textual.containers import Vertical
from textual.screen import ModalScreen
from textual.widgets import Static

from tui.messages import trouble_sentence
from tui.widgets.path_input import PathInput
from tui.widgets.target_fields import TargetFields


class TargetForm(ModalScreen[str | None]):
    """Gives the words for what was done, or None.

    Parameters
    ----------
    store
        Takes the facts as typed; gives the words, or raises one sentence, which is shown: the form stays.
    """

    BINDINGS: ClassVar = [
        Binding("escape", "leave", "Leave it"),
        Binding("ctrl+n", "store", "Follow it"),
    ]

    def __init__(self, store: Callable[[Mapping[str, str]], Awaitable[str]]) -> None:
        super().__init__()
        self._store = store

    def compose(self) -> ComposeResult:
        """The form and a line for what is wrong."""
        with Vertical(id="target-form") as box:
            box.border_title = "One more target"
            box.border_subtitle = "enter: next line, ctrl+n: follow it, esc: leave it"
            yield TargetFields()
            yield Static("", id="form-trouble")

    def on_mount(self) -> None:
        """Start with the name."""
        self.query_one(TargetFields).begin()

    @on(TargetFields.Done)
    def action_store(self) -> None:
        """Store what was typed."""
        self.run_worker(self._try(), exclusive=True, exit_on_error=False)

    async def _try(self) -> None:
        try:
            words = await self._store(self.query_one(TargetFields).facts())
        except Exception as error:  # one sentence; the form stays
            self.query_one("#form-trouble", Static).update(Text(trouble_sentence(error)))
            return
        self.dismiss(words)

    @on(PathInput.Offered)
    def show_offers(self, event: PathInput.Offered) -> None:
        """What a path may go on with."""
        self.query_one("#form-trouble", Static).update(Text(event.names))

    def action_leave(self) -> None:
        """Follow nothing."""
        self.dismiss(None)
