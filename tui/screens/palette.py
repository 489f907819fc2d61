"""The palette of all actions, found by their words."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

from textual.command import CommandPalette, DiscoveryHit, Hit, Hits, Provider
from textual.widgets import Input

from tui.actions import Action, actions_of


class ActionCommands(Provider):
    """What can be done on the screen under the palette."""

    def _offered(self) -> list[Action]:
        mode = self.app.current_mode
        return [action for action in actions_of(mode) if action.call != "command_palette"]

    def _run(self, action: Action) -> Callable[[], object]:
        return partial(self.screen.run_action, action.call)

    async def discover(self) -> Hits:
        """Everything, in the order of the table."""
        for action in self._offered():
            yield DiscoveryHit(f"{action.label}: {action.help}", self._run(action), help=f"key {action.key_shown}")

    async def search(self, query: str) -> Hits:
        """What matches the words."""
        matcher = self.matcher(query)
        for action in self._offered():
            words = f"{action.label}: {action.help}"
            score = matcher.match(words)
            if score > 0:
                yield Hit(score, matcher.highlight(words), self._run(action), help=f"key {action.key_shown}")


class Palette(CommandPalette):
    """Textual's palette with our actions and a cursor that does not blink."""

    def __init__(self) -> None:
        super().__init__(providers=[ActionCommands], placeholder="What do you want to do?")

    def on_mount(self) -> None:
        """Idle must cost no bytes on the line."""
        self.query_one(Input).cursor_blink = False
