"""The lines over every screen: screens and keys, the target, its steps and what to do next."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from typing import TYPE_CHECKING

from rich.text import Text
from textual.widgets import Static

from tui.actions import SCREENS
from tui.band_look import word_colour
from tui.number_text import with_error

if TYPE_CHECKING:
    from reduce.views import TargetView

_SIGNS = {"done": "✓", "wants you": "!", "waiting": "·"}
_PLAIN_SIGNS = {"done": "+", "wants you": "!", "waiting": "."}
_KINDS = {"type_ia": "type Ia", "cepheid": "Cepheid", "rr_lyrae": "RR Lyrae", "other": "other"}


class ScreenBar(Static):
    """The screens and their digits, the present one stressed."""

    def __init__(self, mode: str) -> None:
        text = Text(no_wrap=True)
        for digit, (name, shown) in enumerate(SCREENS.items(), 1):
            text.append(" ")
            text.append(f"{digit} {shown}", "reverse bold" if name == mode else "")
        super().__init__(text, id="screen-bar")


def heading(view: TargetView, index: int, n: int) -> Text:
    """Name, kind, place in the list and modulus of a target."""
    text = Text(no_wrap=True, overflow="ellipsis")
    text.append(view.target.name, "bold")
    text.append(f"  {_KINDS[view.target.kind]}  {index + 1} of {n}")
    estimate = view.estimate
    if estimate is None or estimate.mu is None:
        text.append("   μ cannot tell yet")
    else:
        text.append("   μ ")
        text.append(with_error(estimate.mu, estimate.mu_err, 3), "bold")
        text.append(" mag")
    return text


def steps_text(view: TargetView, plain: bool, width: int) -> Text:
    """The line of steps, with as many of their details as the width allows: all, those not done, or none."""
    choices = [{step.name for step in view.steps}, {s.name for s in view.steps if s.state != "done"}, set()]
    texts = [_steps(view, _PLAIN_SIGNS if plain else _SIGNS, detailed) for detailed in choices]
    return next((text for text in texts if text.cell_len <= width), texts[-1])


def _steps(view: TargetView, signs: Mapping[str, str], detailed: Collection[str]) -> Text:
    text = Text(no_wrap=True, overflow="ellipsis")
    for i, step in enumerate(view.steps):
        text.append(" > " if i else "", "dim")
        text.append(f"{signs[step.state]} {step.name}", word_colour(step.state))
        if step.detail and step.name in detailed:
            text.append(f" {step.detail}", "dim")
    return text


def next_text(view: TargetView, mode: str) -> Text:
    """What wants doing next, and the key of the screen where it is done."""
    text = Text(view.next_sentence)
    place = next((i for i, name in enumerate(SCREENS.values(), 1) if name == view.next_screen), None)
    if place is not None and SCREENS[mode] != view.next_screen:
        text.append(f"  ({place} {view.next_screen})", "bold")
    return text


class StepLine(Static):
    """Heading, steps and the next thing to do of the chosen target."""

    def __init__(self, mode: str) -> None:
        super().__init__("Reading the logbook.", id="step-line")
        self._mode = mode

    def show(self, view: TargetView | None, index: int, n: int, plain: bool) -> None:
        """Draw a target's line, or say that there is none."""
        if view is None:
            self.update(Text("No target yet."))
            return
        lines = [
            heading(view, index, n),
            steps_text(view, plain, self.app.size.width - 2),
            next_text(view, self._mode),
        ]
        self.update(Text("\n").join(lines))
