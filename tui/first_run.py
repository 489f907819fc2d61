"""The app in a folder without a campaign: six short pages from the frames folder to the first reduction."""

from __future__ import annotations

import asyncio
import logging
import os
from collections.abc import Awaitable, Callable
from pathlib import Path
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Vertical
from textual.widgets import ContentSwitcher, Footer, Static

from reduce.plain_text import clean_text
from tui.actions import FIRST_RUN, screen_bindings
from tui.app import DARK, STYLE
from tui.band_look import word_colour
from tui.messages import trouble_sentence
from tui.terminal import plain_characters
from tui.widgets.delta import DeltaDisplay
from tui.widgets.first_run_pages import (
    BeginPage,
    FramesPage,
    Page,
    RecognisedPage,
    StarsPage,
    TargetPage,
    TelescopePage,
)

if TYPE_CHECKING:
    from reduce.views import FolderSurvey
    from tui.desk import FirstRunDesk

PAGES: tuple[type[Page], ...] = (FramesPage, RecognisedPage, TelescopePage, TargetPage, StarsPage, BeginPage)

_log = logging.getLogger("fadeline.app")


def steps_text(present: int, furthest: int, plain: bool) -> Text:
    """The line of steps: done, at work, to come."""
    done, waiting = ("+", ".") if plain else ("✓", "·")
    text = Text(no_wrap=True, overflow="ellipsis")
    for k, page in enumerate(PAGES):
        text.append(" > " if k else "", "dim")
        if k == present:
            text.append(f"! {page.NAME}", "bold reverse")
        else:
            word, sign = ("done", done) if k < furthest else ("waiting", waiting)
            text.append(f"{sign} {page.NAME}", word_colour(word))
    return text


class FirstRunApp(DeltaDisplay):
    """`made` says at the end whether there is a campaign now."""

    TITLE = "Fadeline"
    CSS_PATH: ClassVar = [STYLE / "app.tcss", STYLE / "screens.tcss", STYLE / "first_run.tcss"]
    BINDINGS: ClassVar = screen_bindings(FIRST_RUN)
    ENABLE_COMMAND_PALETTE = False

    def __init__(self, desk: FirstRunDesk) -> None:
        super().__init__()
        self.desk = desk
        self.survey: FolderSurvey | None = None
        self.filters: dict[str, str] = {}
        self.target_words = self.stars_words = ""
        self.present = self.furthest = 0
        self.made = False
        self.plain = plain_characters(os.environ)
        self.register_theme(DARK)
        self.theme = "fadeline"

    def compose(self) -> ComposeResult:
        """Steps, sentence, page, status line, keys."""
        yield Static(
            Text(
                f" A new campaign in {clean_text(self.desk.folder.resolve(), 300)}", no_wrap=True, overflow="ellipsis"
            ),
            id="screen-bar",
        )
        yield Static("", id="steps")
        yield Static("", id="wants")
        with ContentSwitcher(initial=_id_of(FramesPage), id="pages"):
            for page in PAGES:
                yield page(id=_id_of(page))
        with Vertical(id="status-box"):
            yield Static("", id="status")
        yield Footer(compact=True, show_command_palette=False)

    def on_mount(self) -> None:
        """Start with the frames folder."""
        self.animation_level = "none"
        self.app_resume_signal.subscribe(self, lambda _: self.forget_frame())
        self.query_one(FramesPage).fill(likely_frames_folder(self.desk.folder))
        self._go(0)

    # ---- pages -------------------------------------------------------------------------------------------

    def _go(self, to: int) -> None:
        self.present, self.furthest = to, max(to, self.furthest)
        page = self.query_one(PAGES[to])
        self.query_one(ContentSwitcher).current = page.id
        self.query_one("#steps", Static).update(steps_text(to, self.furthest, self.plain))
        self.query_one("#wants", Static).update(Text(page.WANTS))
        page.begin()  # before the page is painted: what is typed ahead belongs to it
        self.refresh_bindings()

    def say(self, sentence: str, trouble: bool = False) -> None:
        """Put one sentence on the status line."""
        status = self.query_one("#status", Static)
        status.update(Text(sentence))
        status.set_class(trouble, "trouble")

    def action_page_before(self) -> None:
        """Go back one page."""
        self.workers.cancel_group(self, "check")
        self.say("" if self.present else "This is the first step; ^q leaves.")
        self._go(max(self.present - 1, 0))

    def action_next_page(self) -> None:
        """Check this page; go on when it can be used."""
        checks: tuple[Callable[[], Awaitable[str]], ...] = (
            self._look_at_frames, self._accept_filters, self._check_telescope, self._check_target, self._check_stars,
            self._begin,
        )  # fmt: skip
        self.run_worker(self._check(checks[self.present]), group="check", exclusive=True, exit_on_error=False)

    @on(Page.NextPage)
    def take_next(self) -> None:
        """Enter at the end of a page."""
        self.action_next_page()

    @on(Page.PageBefore)
    def take_before(self) -> None:
        """The page asks to go back."""
        self.action_page_before()

    async def _check(self, check: Callable[[], Awaitable[str]]) -> None:
        try:
            words = await check()
        except Exception as error:  # what stands on the page cannot be used
            _log.error("first run", exc_info=error)
            self.say(trouble_sentence(error), trouble=True)
            return
        if self.present == len(PAGES) - 1:
            self.made = True
            self.exit()
            return
        self.say(words)
        self._go(self.present + 1)

    # ---- what each page checks ---------------------------------------------------------------------------

    def _settings(self) -> dict[str, str]:
        return {f"filters.{name}": band for name, band in self.filters.items()} | self.query_one(TelescopePage).typed()

    async def _look_at_frames(self) -> str:
        frames = self.query_one(FramesPage).path
        self.say(f"Reading the headers in {clean_text(frames, 200)}.")
        self._take_survey(await self.desk.survey(frames, self._named()))
        stars = self.query_one(StarsPage)
        if stars.path == Path():
            stars.fill(await asyncio.to_thread(likely_stars, self.desk.folder, frames))
        return ""

    def _named(self) -> dict[str, str]:
        return {f"filters.{name}": band for name, band in self.filters.items()}

    def _take_survey(self, survey: FolderSurvey) -> None:
        self.survey = survey
        self.query_one(RecognisedPage).show(survey)
        self.query_one(TelescopePage).show(survey)
        self.query_one(TargetPage).show(survey)

    @on(RecognisedPage.Named)
    def name_filter(self, event: RecognisedPage.Named) -> None:
        """A filter was given a band: look again what that makes of the frames."""
        self.filters.pop(event.filter_name, None)
        if event.band:
            self.filters[event.filter_name] = event.band
        self.run_worker(self._survey_again(), group="check", exclusive=True, exit_on_error=False)

    async def _survey_again(self) -> None:
        try:
            self._take_survey(await self.desk.survey(self.query_one(FramesPage).path, self._named()))
        except Exception as error:  # the folder went away meanwhile
            self.say(trouble_sentence(error), trouble=True)
            return
        self.query_one(RecognisedPage).begin()

    async def _accept_filters(self) -> str:
        unnamed = sum(row.band is None for row in self.survey.filters) if self.survey else 0
        return f"{unnamed} filters without a band: their frames will not be measured." if unnamed else ""

    async def _check_telescope(self) -> str:
        await self.desk.check_settings(self._settings())
        return ""

    async def _check_target(self) -> str:
        self.target_words = await self.desk.check_target(self.query_one(TargetPage).facts())
        return self.target_words

    async def _check_stars(self) -> str:
        page = self.query_one(StarsPage)
        self.stars_words = await self.desk.check_stars(page.path, self.query_one(TargetPage).facts())
        assert self.survey is not None
        frames = self.query_one(FramesPage).path
        self.query_one(BeginPage).show(self.desk.folder, frames, self.survey, self.target_words, self.stars_words)
        return ""

    async def _begin(self) -> str:
        frames, stars = self.query_one(FramesPage).path, self.query_one(StarsPage).path
        await self.desk.begin(frames, stars, self.query_one(TargetPage).facts(), self._settings())
        return ""

    # ---- keys --------------------------------------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Objects of the headers are offered where a target is asked for."""
        return PAGES[self.present] is TargetPage if action == "next_object" else True

    def action_next_object(self) -> None:
        """Take the next object of the headers as target."""
        self.query_one(TargetPage).take_next_object()

    def action_leave(self) -> None:
        """Leave; no campaign is made."""
        self.exit()


def likely_stars(folder: Path, frames: Path) -> str:
    """The one CSV file in the campaign's folder, in that of the frames or beside it."""
    for place in (folder, frames, frames.resolve().parent):
        found = sorted(place.glob("*.csv")) if place.is_dir() else []
        if found:
            return str(found[0]) if len(found) == 1 else ""
    return ""


def likely_frames_folder(folder: Path) -> str:
    """A folder called like frames beside the campaign's logbook, or its own folder."""
    for name in ("frames", "lights", "data", "raw"):
        if (folder / name).is_dir():
            return f"{folder / name}/"
    return f"{folder.resolve()}/"


def _id_of(page: type[Page]) -> str:
    return f"page-{page.NAME.lower()}"
