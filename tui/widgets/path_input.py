"""A line for a path: tab completes it, and what it could go on with is offered."""

from __future__ import annotations

import asyncio
import os
from collections.abc import Sequence
from pathlib import Path
from typing import ClassVar, Literal

from textual.binding import Binding
from textual.message import Message
from textual.widgets import Input

from reduce.plain_text import clean_text

Wanted = Literal["folder", "csv", ""]
"""What a path should lead to; nothing: the line takes any words and tab does nothing."""
_MOST_SHOWN = 12


def offers(text: str, wanted: Wanted) -> list[str]:
    """Every path that goes on from what was typed, folders with a stroke at the end; hidden names when asked for."""
    head, _, start = text.rpartition("/")
    place = Path(f"{head}/" if "/" in text else ".").expanduser()
    found = []
    try:
        entries = sorted(os.scandir(place), key=lambda entry: entry.name)
    except (OSError, ValueError):
        return []
    for entry in entries:
        if not entry.name.startswith(start) or (entry.name.startswith(".") and not start.startswith(".")):
            continue
        is_folder = entry.is_dir()
        if is_folder or (wanted == "csv" and entry.name.lower().endswith((".csv", ".txt"))):
            found.append(text[: len(text) - len(start)] + entry.name + ("/" if is_folder else ""))
    return found


def completed(text: str, found: Sequence[str]) -> str:
    """The text, longer by what all offers have in common."""
    return os.path.commonprefix(list(found)) if found else text  # noqa: RUF071 - letter by letter, on purpose


def names_of(found: Sequence[str]) -> str:
    """The offers as one harmless line."""
    names = [
        clean_text(path.rstrip("/").rpartition("/")[2], 40) + ("/" if path.endswith("/") else "") for path in found
    ]
    more = f"  and {len(names) - _MOST_SHOWN} more" if len(names) > _MOST_SHOWN else ""
    return "  ".join(names[:_MOST_SHOWN]) + more


class PathInput(Input):
    """One line; `wanted` may change from one use to the next.

    Letters typed ahead on a slow line neither overtake its keys (they have priority) nor are overtaken by them (what
    the keys do waits in the line's own queue).

    Parameters
    ----------
    goes_down
        Enter goes to the next line instead of submitting this one.
    """

    BINDINGS: ClassVar = [
        Binding("tab", "complete", "Complete", show=False, priority=True),
        Binding("enter", "submit", "Store", show=False, priority=True),
        Binding("ctrl+u", "empty_left", "Empty the line", show=False, priority=True),
    ]

    class Offered(Message):
        """What a path could go on with; "" takes the offers away."""

        def __init__(self, names: str) -> None:
            super().__init__()
            self.names = names

    def __init__(
        self,
        wanted: Wanted = "",
        *,
        value: str = "",
        placeholder: str = "",
        id: str | None = None,
        goes_down: bool = False,
    ) -> None:
        super().__init__(value, placeholder=placeholder, compact=True, id=id, select_on_focus=False)
        self.cursor_blink = False
        self.wanted: Wanted = wanted
        self._goes_down = goes_down

    @property
    def path(self) -> Path:
        """What stands in the line, as a path."""
        return Path(self.value.strip()).expanduser()

    async def action_submit(self) -> None:
        """Go to the next line, or submit this one."""
        if self._goes_down:
            self.screen.focus_next()
        else:
            self.call_later(super().action_submit)

    def action_empty_left(self) -> None:
        """Take away everything before the cursor."""
        self.call_later(self.action_delete_left_all)

    def action_complete(self) -> None:
        """Go on as far as it is clear, and offer the rest; a line for other words passes tab on."""
        if not self.wanted:
            self.screen.focus_next()
            return
        self.call_later(self._complete)

    def show_end(self) -> None:
        """Scroll to the end of the line, once the layout knows how long it is."""
        self.call_after_refresh(lambda: self.scroll_to(x=self.max_scroll_x, animate=False))

    async def _complete(self) -> None:
        found = await asyncio.to_thread(offers, self.value, self.wanted)
        text = self.value
        self.cursor_position = len(text)
        self.insert_text_at_cursor(completed(text, found)[len(text) :])
        self.show_end()
        self.post_message(self.Offered(names_of(found) if len(found) > 1 else "" if found else "(nothing there)"))
