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
from tui.preferences import Preferences

HELP = Path(__file__).parents[1] / "help"


GUIDE = ("guide_night", "guide_doubt")
"""One page each."""


def help_text(mode: str, preferences: Preferences | None = None) -> Text:
    """The screen's own words, the words common to all, and the keys, as the observer has set them."""
    key_of = (preferences or Preferences()).key_shown
    text = Text.assemble((f"{SCREENS.get(mode, mode.capitalize())}\n", "bold"))
    for name in (mode, "everywhere"):
        words = " ".join((HELP / f"{name}.md").read_text(encoding="utf-8").split())
        text.append(f"{words}\n\n")
    text.append("Keys\n", "bold")
    for action in actions_of(mode):
        text.append(f"  {key_of(action):6}", "bold")
        text.append(f" {action.help}\n")
    return text


class HelpScreen(ModalScreen[None]):
    """A window over a screen; any of its keys closes it."""

    BINDINGS: ClassVar = [Binding("escape,question_mark,q,enter", "leave", "Close")]

    def __init__(self, mode: str, preferences: Preferences) -> None:
        super().__init__()
        self._mode, self._preferences = mode, preferences

    def compose(self) -> ComposeResult:
        """The text, scrollable."""
        with VerticalScroll(id="help") as box:
            box.border_subtitle = "esc closes"
            yield Static(help_text(self._mode, self._preferences), id="help-text")

    def action_leave(self) -> None:
        """Close."""
        self.dismiss()


def guide_text(page: int) -> Text:
    """A page of the observer's guide: # begins a heading, indented lines stay as they are, others run together."""
    text, running = Text(), ""
    for line in [*(HELP / f"{GUIDE[page]}.md").read_text(encoding="utf-8").splitlines(), ""]:
        if line and not line.startswith(("#", " ")):
            running += f" {line}" if running else line
            continue
        text.append(f"{running}\n" if running else "")
        running = ""
        if line:
            heading = line.startswith("#")
            text.append(f"\n{line.lstrip('# ')}\n" if heading else f"{line}\n", "bold" if heading else "")
    text.remove_suffix("\n")
    return text[1:] if text.plain.startswith("\n") else text


class GuideScreen(ModalScreen[None]):
    """The observer's guide, page by page."""

    BINDINGS: ClassVar = [
        Binding("escape,q,G", "leave", "Close"),
        Binding("right,left,enter,space", "turn", "Turn the page"),
    ]

    def __init__(self) -> None:
        super().__init__()
        self._page = 0

    def compose(self) -> ComposeResult:
        """One page, scrollable where the terminal is small."""
        with VerticalScroll(id="help"):
            yield Static("", id="help-text")

    def on_mount(self) -> None:
        """Open the first page."""
        self._show()

    def _show(self) -> None:
        box = self.query_one("#help", VerticalScroll)
        box.border_subtitle = f"page {self._page + 1} of {len(GUIDE)}, → turns it, esc closes"
        self.query_one("#help-text", Static).update(guide_text(self._page))
        box.scroll_home(animate=False)

    def action_turn(self) -> None:
        """The other page."""
        self._page = (self._page + 1) % len(GUIDE)
        self._show()

    def action_leave(self) -> None:
        """Close."""
        self.dismiss()
