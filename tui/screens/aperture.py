"""A small window: the radius of the aperture of one band."""

from __future__ import annotations

from typing import ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.binding import Binding
from textual.screen import ModalScreen
from textual.widgets import OptionList
from textual.widgets.option_list import Option

from reduce.records import LADDER_FWHM


class ApertureScreen(ModalScreen[str | None]):
    """Gives the chosen radius in FWHM as text, ``auto``, or None."""

    BINDINGS: ClassVar = [Binding("escape", "leave", "Leave it")]

    def __init__(self, band: str) -> None:
        super().__init__()
        self._band = band

    def compose(self) -> ComposeResult:
        """The choices."""
        options = [Option(Text("by signal-to-noise"), id="auto")]
        options += [Option(Text(f"{radius:g} FWHM"), id=f"{radius:g}") for radius in LADDER_FWHM]
        box = OptionList(*options, id="apertures")
        box.border_title = f"Aperture radius in {self._band}"
        box.border_subtitle = "enter chooses, esc leaves it"
        yield box

    @on(OptionList.OptionSelected)
    def choose(self, event: OptionList.OptionSelected) -> None:
        """Give the choice back."""
        self.dismiss(event.option.id)

    def action_leave(self) -> None:
        """Change nothing."""
        self.dismiss(None)
