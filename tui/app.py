"""The app: one snapshot, six screens, and workers that fetch, decide and preview without ever blocking."""

from __future__ import annotations

import asyncio
import logging
import os
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING, ClassVar

from textual import on
from textual.screen import Screen
from textual.theme import Theme

from tui.actions import SCREENS, app_bindings
from tui.messages import Said, SnapshotFetched, trouble_sentence
from tui.preferences import Preferences
from tui.terminal import few_colours, plain_characters
from tui.widgets.delta import DeltaDisplay

if TYPE_CHECKING:
    from reduce.views import Snapshot, TargetView
    from tui.desk import Desk
    from tui.widgets.preview import Look

POLL_S = 0.15
SLOW_POLL_S = 1.5
"""Over a slow link: pictures that follow each other closely are drawn once."""

_log = logging.getLogger("fadeline.app")
_log.addHandler(logging.NullHandler())  # a traceback goes to the log file or nowhere, never on the screen
STYLE = Path(__file__).parent / "style"

DARK = Theme(
    name="fadeline",
    primary="#56b4e9",
    secondary="#009e73",
    accent="#e69f00",
    warning="#e69f00",
    error="#d55e00",
    success="#009e73",
    foreground="#c8c8c8",
    background="#000000",
    surface="#0c0c0c",
    panel="#181818",
    dark=True,
)


def _factory(mode: str) -> Callable[[], Screen[None]]:
    """Import a screen only when it is first shown: the first paint pays for one."""

    def make() -> Screen[None]:
        module = import_module(f"tui.screens.{mode}")
        made: Screen[None] = getattr(module, f"{SCREENS[mode].title().replace(' ', '')}Screen")()
        return made

    return make


class FadelineApp(DeltaDisplay):
    """The observing log and reducer on a `Desk`."""

    TITLE = "Fadeline"
    CSS_PATH: ClassVar = [STYLE / "app.tcss", STYLE / "screens.tcss"]
    BINDINGS: ClassVar = app_bindings()
    MODES: ClassVar = {mode: _factory(mode) for mode in SCREENS}
    DEFAULT_MODE = "tonight"
    HORIZONTAL_BREAKPOINTS = [(0, "-narrow"), (120, "-wide")]  # noqa: RUF012 - declared so by textual
    VERTICAL_BREAKPOINTS = [(0, "-short"), (24, "-high")]  # noqa: RUF012 - declared so by textual
    COMMAND_PALETTE_BINDING = "ctrl+p"

    def __init__(self, desk: Desk, preferences: Preferences | None = None, slow_link: bool = False) -> None:
        super().__init__()
        self.desk = desk
        self.preferences = preferences or Preferences()
        self.set_keymap(self.preferences.keymap)
        self.slow_link = slow_link
        self.snapshot: Snapshot | None = None
        self.target_name = ""
        self.plain = plain_characters(os.environ)
        self.few_colours = few_colours(os.environ)
        self.dots = self.few_colours
        self.safety_shown = True
        self.sentence = Said("")
        self._alerts_seen: set[str] | None = None
        self._nudge = asyncio.Event()
        self._writing = asyncio.Lock()
        self.register_theme(DARK)
        self.theme = "fadeline"

    def on_mount(self) -> None:
        """Start following the logbook."""
        self.animation_level = "none"
        self.app_resume_signal.subscribe(self, lambda _: self.forget_frame())
        self.run_worker(self._follow(), group="follow", exit_on_error=False)

    # ---- the snapshot ------------------------------------------------------------------------------------

    async def _follow(self) -> None:
        """Look at the stamp again and again, or at once after a nudge; fetch a snapshot when it moved."""
        seen: int | None = None
        trouble = ""
        while True:
            self._nudge.clear()
            try:
                stamp = await asyncio.to_thread(self.desk.stamp)
                if stamp != seen:
                    self.post_message(SnapshotFetched(await self.desk.snapshot()))
                    seen = stamp
                if trouble:
                    trouble = ""
                    self.say("")
            except Exception as error:  # one sentence on the status line, then try again
                if trouble != (trouble := trouble_sentence(error)):
                    _log.error("following the logbook", exc_info=error)
                    self.say(trouble, trouble=True)
            try:
                await asyncio.wait_for(self._nudge.wait(), SLOW_POLL_S if self.slow_link else POLL_S)
            except TimeoutError:
                continue

    @on(SnapshotFetched)
    def take_snapshot(self, message: SnapshotFetched) -> None:
        """Hold the new picture and draw it."""
        self.snapshot = message.snapshot
        names = [view.target.name for view in message.snapshot.targets]
        if self.target_name not in names:
            self.target_name = names[0] if names else ""
        self.redraw_screen()
        self._tell_alerts(message.snapshot)

    def _tell_alerts(self, snapshot: Snapshot) -> None:
        """Say what is new of this night, and ring or flash as wished; what was there at the start is old."""
        new = [alert for alert in snapshot.alerts if alert.id not in (self._alerts_seen or ())]
        first, self._alerts_seen = self._alerts_seen is None, {alert.id for alert in snapshot.alerts}
        if first or not new:
            return
        more = f" (and {len(new) - 1} more)" if len(new) > 1 else ""
        self.post_message(Said(new[-1].sentence + more, flash=self.preferences.alert == "flash"))
        if self.preferences.alert == "bell":
            self.bell()

    @property
    def view(self) -> TargetView | None:
        """The chosen target."""
        targets = self.snapshot.targets if self.snapshot else ()
        return next((v for v in targets if v.target.name == self.target_name), None)

    @property
    def picture_look(self) -> Look:
        """How frames are drawn."""
        return "plain" if self.plain else "braille" if self.dots or self.slow_link else "blocks"

    def change_picture_look(self) -> None:
        """Draw frames in shades of grey, or in dots."""
        if self.plain or self.few_colours:
            why = "plain characters are drawn" if self.plain else "this terminal has too few colours for shades of grey"
            self.say(f"Nothing to change: {why}.")
            return
        self.dots = not self.dots
        self.say("Pictures are drawn in dots." if self.dots else "Pictures are drawn in shades of grey.")

    def redraw_screen(self) -> None:
        """Draw the campaign on the present screen, also when a window lies above it."""
        from tui.screens.campaign_screen import CampaignScreen

        for screen in self.screen_stack:
            if isinstance(screen, CampaignScreen):
                screen.draw()

    # ---- words -------------------------------------------------------------------------------------------

    def say(self, sentence: str, trouble: bool = False) -> None:
        """Put one sentence on the status line; may be called from a worker."""
        self.post_message(Said(sentence, trouble))

    @on(Said)
    def show_sentence(self, message: Said) -> None:
        """Show it on the present screen and keep it for the next."""
        from tui.screens.campaign_screen import CampaignScreen

        self.sentence = message
        for screen in self.screen_stack:
            if isinstance(screen, CampaignScreen):
                screen.show_sentence(message)

    # ---- writing -----------------------------------------------------------------------------------------

    def write(self, what: Callable[[], str]) -> None:
        """Do something to the logbook in a thread, one after the other, and say the words it returns."""
        self.run_worker(self._write(what), group="write", exit_on_error=False)

    async def _write(self, what: Callable[[], str]) -> None:
        async with self._writing:
            try:
                self.say(await asyncio.to_thread(what))
            except Exception as error:  # a refused decision is a sentence
                _log.error("writing to the logbook", exc_info=error)
                self.say(trouble_sentence(error), trouble=True)
        self._nudge.set()

    def look_again(self) -> None:
        """Fetch a new picture at once when something was written."""
        self._nudge.set()

    def decide(self, subject: str, aspect: str, value: str, words: str) -> None:
        """Append a decision and say what was done."""

        def what() -> str:
            self.desk.decide(subject, aspect, value)
            return f"{words} (u takes it back)"

        self.write(what)

    # ---- actions of every screen -------------------------------------------------------------------------

    def action_go(self, mode: str) -> None:
        """Show a screen."""
        self.switch_mode(mode)

    def action_step_target(self, step: int) -> None:
        """Choose the next or the previous target."""
        names = [view.target.name for view in self.snapshot.targets] if self.snapshot else []
        if names:
            self.target_name = names[(names.index(self.target_name) + step) % len(names)]
            self.redraw_screen()

    def action_undo(self) -> None:
        """Take the last decision back."""

        def what() -> str:
            words = self.desk.undo()
            return f"Taken back: {words}" if words else "There is nothing to take back."

        self.write(what)

    def action_note(self) -> None:
        """Go to the log and write."""
        from tui.screens.log import LogScreen

        self.switch_mode("log")
        if isinstance(self.screen, LogScreen):
            self.screen.begin_note()

    def action_plain_characters(self) -> None:
        """Change between fine and plain drawing."""
        self.plain = not self.plain
        self.say("Drawing with plain characters." if self.plain else "Drawing finely.")
        self.redraw_screen()

    def action_slow_link(self) -> None:
        """Send less, or as usual again."""
        self.slow_link = not self.slow_link
        self.say(
            "Slow link: fewer redraws, and pictures only when asked for." if self.slow_link else "Drawing as usual."
        )
        self.redraw_screen()

    def action_guide(self) -> None:
        """Show the observer's guide."""
        from tui.screens.help import GuideScreen

        self.push_screen(GuideScreen())

    def action_redraw(self) -> None:
        """Write every cell again."""
        self.forget_frame()
        self.refresh(layout=True)

    def action_help(self) -> None:
        """Show the help of this screen."""
        from tui.screens.help import HelpScreen

        mode = getattr(self.screen, "MODE", "") or self.current_mode
        self.push_screen(HelpScreen(mode, self.preferences))

    def action_command_palette(self) -> None:
        """Open the palette of all actions."""
        from tui.screens.palette import Palette

        if not isinstance(self.screen, Palette):
            self.push_screen(Palette())

    async def action_quit(self) -> None:
        """Leave."""
        self.exit()
