"""Help: what a screen is for, and its keys from the table of actions."""

from __future__ import annotations

from pathlib import Path
from typing import ClassVar

from rich.text import Text
from textual.app import ComposeResult
from textual.binding import Binding
from textual.containers import VerticalScroll
from textual.screen import ModalScreen
from textual.widgets import Static

from tui.actions import SCREENS, actions_of

HELP = Path(__file__).parents[1] / "help"


def help_text(mode: str) -> Text:
    """The screen's own words, the words common to all, and the keys."""
    text = Text.assemble((f"{SCREENS[mode]}\n", "bold"))
    for name in (mode, "everywhere"):
        words = " ".join((HELP / f"{name}.md").read_text(encoding="utf-8").split())
        text.append(f"{words}\n\n")
    text.append("Keys\n", "bold")
    for action in actions_of(mode):
        text.append(f"  {action.key_shown:6}", "bold")
        text.append(f" {action.help}\n")
    return text


class HelpScreen(ModalScreen[None]):
    """A window over a screen; any of its keys closes it."""

    BINDINGS: ClassVar = [Binding("escape,question_mark,q,enter", "leave", "Close")]

    def __init__(self, mode: str) -> None:
        super().__init__()
        self._mode = mode

    def compose(self) -> ComposeResult:
        """The text, scrollable."""
        with VerticalScroll(id="help") as box:
            box.border_subtitle = "esc closes"
            yield Static(help_text(self._mode), id="help-text")

    def action_leave(self) -> None:
        """Close."""
        self.dismiss()
