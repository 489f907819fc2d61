"""The palette of all actions, found by their words."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, cast

from textual.command import CommandPalette, DiscoveryHit, Hit, Hits, Provider
from textual.widgets import Input

from tui.actions import ACTIONS, SCREENS, Action, actions_of, group_of

if TYPE_CHECKING:
    from tui.app import FadelineApp


class ActionCommands(Provider):
    """Everything that can be done: on the screen under the palette first, then on the others, which it goes to."""

    @property
    def _fadeline(self) -> FadelineApp:
        return cast("FadelineApp", self.app)

    def _offered(self) -> Iterator[Action]:
        here = actions_of(getattr(self.screen, "MODE", "") or self.app.current_mode)
        elsewhere = [a for a in ACTIONS if a not in here and any(mode in SCREENS for mode in a.screens)]
        return (action for action in (*here, *elsewhere) if action.call != "command_palette")

    def _run(self, action: Action) -> Callable[[], object]:
        async def run() -> None:
            mode = next((mode for mode in action.screens if mode in SCREENS), "")
            if action.screens and getattr(self.screen, "MODE", "") not in action.screens and mode:
                await self.app.switch_mode(mode)
                await self.app.screen.run_action(action.call)
            else:
                await self.screen.run_action(action.call)

        return run

    def _words(self, action: Action) -> tuple[str, str]:
        return (
            f"{group_of(action)}: {action.help}",
            f"key {self._fadeline.preferences.key_shown(action)}, called {action.name}",
        )

    async def discover(self) -> Hits:
        """Everything, in the order of the table."""
        for action in self._offered():
            words, key = self._words(action)
            yield DiscoveryHit(words, self._run(action), help=key)

    async def search(self, query: str) -> Hits:
        """What matches the words."""
        matcher = self.matcher(query)
        for action in self._offered():
            words, key = self._words(action)
            score = matcher.match(words)
            if score > 0:
                yield Hit(score, matcher.highlight(words), self._run(action), help=key)


class Palette(CommandPalette):
    """Textual's palette with our actions and a cursor that does not blink."""

    def __init__(self) -> None:
        super().__init__(providers=[ActionCommands], placeholder="What do you want to do?")

    def on_mount(self) -> None:
        """Idle must cost no bytes on the line."""
        self.query_one(Input).cursor_blink = False
