"""The facts of a target as a small form: name, kind and position, and what the distance needs."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.message import Message
from textual.widgets import Input, Label

from tui.widgets.path_input import PathInput

FIELDS: tuple[tuple[str, str, str], ...] = (
    ("name", "name", "as you call it"),
    ("position", "RA, Dec", "degrees, or hh:mm:ss, dd:mm:ss (ICRS)"),
    ("kind", "kind", "type_ia, cepheid, rr_lyrae or other"),
    ("z", "redshift", "heliocentric; may wait"),
    ("ebv_mw", "Milky Way E(B−V)", "0.021, SF11 or 0.021, SFD; may wait"),
    ("spectrum", "spectroscopic type", "Ia, when a spectrum was taken"),
    ("host", "host's centre", "RA, Dec; may wait"),
    ("reference", "reference folder", "frames without the target; tab completes"),
)
"""Fact, label, hint."""
_START: Mapping[str, str] = {"kind": "type_ia"}
Wanted = Literal["folder", ""]


class TargetFields(Vertical):
    """Enter goes from line to line; enter on the last one is done."""

    class Done(Message):
        """The last line was left with enter."""

    def compose(self) -> ComposeResult:
        """A label and a line each."""
        for fact, label, hint in FIELDS:
            with Horizontal(classes="fact"):
                yield Label(label)
                wanted: Wanted = "folder" if fact == "reference" else ""
                last = fact == FIELDS[-1][0]
                start = _START.get(fact, "")
                yield PathInput(wanted, value=start, placeholder=hint, id=f"fact-{fact}", goes_down=not last)

    def facts(self) -> dict[str, str]:
        """What was typed."""
        return {fact: self._line(fact).value.strip() for fact, _, _ in FIELDS}

    def fill(self, **facts: str) -> None:
        """Put these texts into their lines."""
        for fact, text in facts.items():
            self._line(fact).value = text

    def begin(self, fact: str = "name") -> None:
        """Put the cursor into a line."""
        self._line(fact).focus()

    def _line(self, fact: str) -> PathInput:
        return self.query_one(f"#fact-{fact}", PathInput)

    @on(Input.Submitted)
    def finish(self, event: Input.Submitted) -> None:
        """Enter on the last line."""
        event.stop()
        self.post_message(self.Done())
