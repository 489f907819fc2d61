"""The pages of the first run, one question each."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.message import Message
from textual.widgets import DataTable, Input, Label, OptionList, Static
from textual.widgets.option_list import Option

from reduce.plain_text import clean_text
from tui.band_look import word_colour
from tui.screens.choice import ChoiceScreen
from tui.setup_rows import BAND_WORDS
from tui.survey_text import counts_text, survey_text
from tui.widgets.path_input import PathInput, Wanted
from tui.widgets.row_table import Cells, RowTable, cell
from tui.widgets.target_fields import TargetFields

if TYPE_CHECKING:
    from reduce.views import FolderSurvey, ObjectRow

GO_ON = "go on"


class Page(Vertical):
    """One step; `NextPage` asks to go on."""

    NAME = ""
    WANTS = ""
    """The sentence on what wants doing, with its key."""

    class NextPage(Message):
        """The page was left with enter."""

    class PageBefore(Message):
        """The page asks to go back."""

    def begin(self) -> None:
        """Put the cursor where it is needed."""


class PathPage(Page):
    """Asks for one path."""

    WANTED: Wanted = "folder"
    LABEL = ""

    def compose(self) -> ComposeResult:
        """The line, what it may go on with, and what was found."""
        with Horizontal(classes="fact"):
            yield Label(self.LABEL)
            yield PathInput(self.WANTED, placeholder="tab completes")
        yield Static("", classes="offers")
        yield Static("", classes="found")

    def begin(self) -> None:
        """Into the line."""
        self.query_one(PathInput).focus()

    @property
    def path(self) -> Path:
        """What was typed; nothing is the present folder."""
        return self.query_one(PathInput).path

    def fill(self, text: str) -> None:
        """Put a path into the line."""
        line = self.query_one(PathInput)
        line.value = text
        line.cursor_position = len(text)
        line.show_end()

    def tell(self, words: str) -> None:
        """Say what was found."""
        self.query_one(".found", Static).update(Text(words))

    @on(PathInput.Offered)
    def show_offers(self, event: PathInput.Offered) -> None:
        """What the path may go on with."""
        self.query_one(".offers", Static).update(Text(event.names))

    @on(Input.Changed)
    def forget_offers(self) -> None:
        """They belonged to what stood there before."""
        self.query_one(".offers", Static).update("")

    @on(Input.Submitted)
    def go_on(self, event: Input.Submitted) -> None:
        """Enter goes on."""
        event.stop()
        self.post_message(self.NextPage())


class FramesPage(PathPage):
    """Where the frames are."""

    NAME = "Frames"
    WANTS = "Say where your frames lie, or will land; folders below count too: enter goes on."
    LABEL = "Frames folder"


class RecognisedPage(Page):
    """What lies there, and which band each filter stands for."""

    NAME = "Recognised"
    WANTS = "See whether your frames were understood; enter on a filter names its band, ^n goes on."

    class Named(Message):
        """A filter was given a band; "" takes it back."""

        def __init__(self, filter_name: str, band: str) -> None:
            super().__init__()
            self.filter_name, self.band = filter_name, band

    def compose(self) -> ComposeResult:
        """Text and table."""
        with VerticalScroll(id="survey-box", can_focus=False):
            yield Static("", id="survey")
        yield RowTable("filter", "frames", "band", id="filters")

    def begin(self) -> None:
        """On the first filter without a band, or on going on."""
        table = self.query_one(RowTable)
        table.focus()
        table.move_cursor(row=self._first, animate=False)

    def show(self, survey: FolderSurvey) -> None:
        """Draw what was found."""
        self.query_one("#survey", Static).update(survey_text(survey))
        rows: list[tuple[str, Cells]] = []
        for row in survey.filters:
            band = cell(row.band or "no band: enter names it", "" if row.band else word_colour("wants you"))
            rows.append(
                (f"filter {row.name}", (cell(row.name or "(none stated)"), cell(row.n_frames, right=True), band))
            )
        rows.append((GO_ON, (cell("That is right: go on", "bold"), cell(""), cell(""))))
        self._first = next((k for k, row in enumerate(survey.filters) if row.band is None), len(survey.filters))
        self.query_one(RowTable).show(rows)

    @on(DataTable.RowSelected)
    def choose(self, event: DataTable.RowSelected) -> None:
        """Enter on a row."""
        event.stop()
        key = event.row_key.value or ""
        if key == GO_ON:
            self.post_message(self.NextPage())
            return
        name = key.removeprefix("filter ")
        choices = (*BAND_WORDS.items(), ("", "as its name says, or none"))

        def take(band: str | None) -> None:
            if band is not None:
                self.post_message(self.Named(name, band))

        self.app.push_screen(ChoiceScreen(f"Filter {name or '(none stated)'} stands for", choices), take)


TELESCOPE_FIELDS = (
    ("site.position", "latitude, longitude, height", "43.5, -5.2, 620: degrees north and east, metres"),
    ("telescope.aperture_m", "aperture, m", "0.3: for the scintillation noise"),
    ("camera.scale_arcsec", "arcsec per pixel", "unbinned, where headers are silent"),
    ("camera.gain_e_per_adu", "gain, e⁻/ADU", "where headers are silent"),
    ("camera.read_noise_e", "read noise, e⁻", "where headers are silent"),
    ("camera.saturation_adu", "saturation, ADU", "65535, where headers are silent"),
)
"""Key of observatory.toml, label, hint."""


class TelescopePage(Page):
    """Site, telescope and camera."""

    NAME = "Telescope"
    WANTS = "Say where you observe and with what, as far as you know; all of it may wait: enter goes down, ^n on."

    def compose(self) -> ComposeResult:
        """A label and a line each."""
        for key, label, hint in TELESCOPE_FIELDS:
            with Horizontal(classes="fact"):
                yield Label(label)
                last = key == TELESCOPE_FIELDS[-1][0]
                yield PathInput(placeholder=hint, id=_id_of(key), goes_down=not last)
        yield Static("", id="telescope-notes")

    def begin(self) -> None:
        """Into the first line."""
        self.query(PathInput).first().focus()

    def show(self, survey: FolderSurvey) -> None:
        """What headers say of the camera stands below."""
        said = "\n".join(f"Headers say: {camera}." for camera in survey.cameras[:2])
        self.query_one("#telescope-notes", Static).update(
            Text(f"{said}\nWithout a site, airmass, twilight and extinction are left out.".strip())
        )

    def typed(self) -> dict[str, str]:
        """Key of observatory.toml → what was typed, where something was."""
        found = {key: self.query_one(f"#{_id_of(key)}", PathInput).value.strip() for key, _, _ in TELESCOPE_FIELDS}
        return {key: text for key, text in found.items() if text}

    @on(Input.Submitted)
    def go_on(self, event: Input.Submitted) -> None:
        """Enter on the last line: the next page."""
        event.stop()
        self.post_message(self.NextPage())


def _id_of(key: str) -> str:
    return "line-" + key.replace(".", "-")


class TargetPage(Page):
    """What is followed."""

    NAME = "Target"
    WANTS = "Name what you follow and give its own position; ^o takes an object of the headers, ^n goes on."

    def compose(self) -> ComposeResult:
        """The form, and what headers call their objects."""
        yield TargetFields()
        yield Static("", classes="offers")
        yield Static("", id="objects")

    def begin(self) -> None:
        """Into the first empty line."""
        fields = self.query_one(TargetFields)
        facts = fields.facts()
        fields.begin(next((fact for fact in ("name", "position") if not facts[fact]), "name"))

    def facts(self) -> dict[str, str]:
        """What was typed."""
        return self.query_one(TargetFields).facts()

    def show(self, survey: FolderSurvey) -> None:
        """Objects of the headers."""
        self._objects: tuple[ObjectRow, ...] = survey.objects
        self._taken = -1
        names = ", ".join(row.name for row in self._objects[:4])
        self.query_one("#objects", Static).update(Text(f"Objects of the headers: {names}" if names else ""))

    def take_next_object(self) -> None:
        """Fill name and position from the next object of the headers."""
        if not self._objects:
            return
        self._taken = (self._taken + 1) % len(self._objects)
        row = self._objects[self._taken]
        position = "" if row.ra_deg is None or row.dec_deg is None else f"{row.ra_deg:.6f}, {row.dec_deg:.6f}"
        self.query_one(TargetFields).fill(name=row.name, position=position)
        words = (
            f"{row.name}: that is where the telescope pointed, not where the target is; it is measured at the very "
            "place given here, so type the target's own position, to an arcsecond."
            if position
            else f"{row.name}: its frames give no common position; type the target's own."
        )
        self.query_one("#objects", Static).update(Text(words))
        self.begin()

    @on(PathInput.Offered)
    def show_offers(self, event: PathInput.Offered) -> None:
        """What the reference folder may go on with."""
        self.query_one(".offers", Static).update(Text(event.names))

    @on(TargetFields.Done)
    def go_on(self, event: TargetFields.Done) -> None:
        """Enter on the last line."""
        event.stop()
        self.post_message(self.NextPage())


class StarsPage(PathPage):
    """The comparison sequence."""

    NAME = "Stars"
    WANTS = "Give the file of comparison stars, a CSV with id,ra,dec and B,B_err,V,V_err,…: enter goes on."
    WANTED: Wanted = "csv"
    LABEL = "Comparison stars"


class BeginPage(Page):
    """Everything once more."""

    NAME = "Begin"
    WANTS = "Enter makes the campaign and opens it; frames are reduced at once."

    def compose(self) -> ComposeResult:
        """The summary and the two ways."""
        yield Static("", id="summary")
        yield OptionList(
            Option("Make the campaign", id="begin"), Option("Not yet: go back", id="back"), id="begin-choices"
        )

    def begin(self) -> None:
        """On making it."""
        self.query_one(OptionList).focus()
        self.query_one(OptionList).highlighted = 0

    def show(self, folder: Path, frames: Path, survey: FolderSurvey, target: str, stars: str) -> None:
        """What will be made."""
        lines = (
            ("Campaign    ", clean_text(folder.resolve(), 300)),
            ("Frames      ", f"{clean_text(frames.resolve(), 300)}: {counts_text(survey.kinds)}"),
            ("Target      ", target),
            ("Stars       ", stars),
        )
        self.query_one("#summary", Static).update(
            Text("\n").join(Text.assemble((label, "bold"), words) for label, words in lines)
        )

    @on(OptionList.OptionSelected)
    def choose(self, event: OptionList.OptionSelected) -> None:
        """Make it, or go back."""
        event.stop()
        self.post_message(self.NextPage() if event.option.id == "begin" else self.PageBefore())
