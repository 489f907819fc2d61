"""A small window: one of several ways."""

from __future__ import annotations

from collections.abc import Sequence
from typing import ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.binding import Binding
from textual.screen import ModalScreen
from textual.widgets import OptionList
from textual.widgets.option_list import Option


class ChoiceScreen(ModalScreen[str | None]):
    """Gives the value of the way that was chosen, or None.

    Parameters
    ----------
    title
        What is chosen.
    options
        (value, words) of each way.
    """

    BINDINGS: ClassVar = [Binding("escape", "leave", "Leave it")]

    def __init__(self, title: str, options: Sequence[tuple[str, str]]) -> None:
        super().__init__()
        self._title, self._options = title, options

    def compose(self) -> ComposeResult:
        """The choices."""
        box = OptionList(*(Option(Text(words), id=value) for value, words in self._options), id="choices")
        box.border_title = self._title
        box.border_subtitle = "enter chooses, esc leaves it"
        yield box

    @on(OptionList.OptionSelected)
    def choose(self, event: OptionList.OptionSelected) -> None:
        """Give the choice back."""
        self.dismiss(event.option.id)

    def action_leave(self) -> None:
        """Change nothing."""
        self.dismiss(None)
