"""What the six screens share: the lines on top, the status line and drawing the snapshot when it is new."""

from __future__ import annotations

from abc import abstractmethod
from typing import TYPE_CHECKING, ClassVar, cast

from rich.text import Text
from textual.app import ComposeResult
from textual.screen import Screen
from textual.widgets import Footer, Static

from tui.widgets.step_line import ScreenBar, StepLine

if TYPE_CHECKING:
    from reduce.views import Snapshot, TargetView
    from tui.app import FadelineApp
    from tui.messages import Said


class CampaignScreen(Screen[None]):
    """A screen that draws the campaign; subclasses give `body` and `show`."""

    MODE: ClassVar[str] = ""

    def compose(self) -> ComposeResult:
        """Lines on top, body, status line, footer."""
        yield ScreenBar(self.MODE)
        yield StepLine(self.MODE)
        yield from self.body()
        yield Static("", id="status")
        yield Footer(compact=True, show_command_palette=False)

    @abstractmethod
    def body(self) -> ComposeResult:
        """Widgets between the lines on top and the status line."""

    @abstractmethod
    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the campaign."""

    @property
    def fadeline(self) -> FadelineApp:
        """The app, with its own type."""
        return cast("FadelineApp", self.app)

    def on_mount(self) -> None:
        """Draw what is there already."""
        self.draw()

    def on_screen_resume(self) -> None:
        """Draw what came while another screen was shown."""
        self.draw()
        self.show_sentence(self.fadeline.sentence)

    def on_resize(self) -> None:
        """The line of steps depends on the width."""
        self.draw()

    def draw(self) -> None:
        """Draw the app's snapshot."""
        snapshot, view = self.fadeline.snapshot, self.fadeline.view
        if snapshot is None or not self.is_mounted:
            return
        names = [v.target.name for v in snapshot.targets]
        index = names.index(view.target.name) if view else 0
        self.query_one(StepLine).show(view, index, len(names), self.fadeline.plain)
        self.show(snapshot, view)

    def show_sentence(self, said: Said) -> None:
        """Show the app's last words."""
        if self.is_mounted:
            status = self.query_one("#status", Static)
            status.update(Text(said.sentence, no_wrap=True, overflow="ellipsis"))
            status.set_class(said.trouble, "trouble")
            status.set_class(said.flash, "flash")
