"""Frames: every frame with its verdict, a picture of the chosen one, and the last word by a person."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal
from textual.widgets import DataTable, Static

from tui.actions import screen_bindings
from tui.band_look import band_colour, word_colour
from tui.messages import trouble_sentence
from tui.number_text import UNKNOWN, number, ut, with_error
from tui.picture_view import rings_of, uncrowded
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.preview import Preview
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from reduce.views import FrameRow, Snapshot, TargetView
    from tui.app import FadelineApp

FILTERS = ("this target", "wants you", "all frames")
NAME_WIDTH = 16
PREVIEW_PIXELS = 128
"""Asked for whatever the size of the widget, which shrinks it further; a resize needs no new picture."""
SLOW_SENTENCE = "Slow link: v fetches the picture, w draws as usual again."
CELLS_A_RING = 40
PREVIEW_WAIT_S = 0.15
"""A picture is fetched once the cursor has rested this long."""


def filtered(rows: tuple[FrameRow, ...], chosen: str, target: str) -> list[FrameRow]:
    """Rows that a filter shows; frames without a target belong to every target until they are recognised."""
    if chosen == "all frames":
        return list(rows)
    lights = [row for row in rows if row.outcome != "calibration"]
    mine = [row for row in lights if target in row.targets or not row.targets]
    if chosen == "this target":
        return mine
    return [row for row in mine if row.state == "doubtful" or row.outcome in ("no match", "unreadable")]


def shortened(file: str) -> str:
    """A long file name without its beginning: the running number at its end tells frames apart."""
    return file if len(file) <= NAME_WIDTH else "…" + file[1 - NAME_WIDTH :]


def details_text(row: FrameRow, target: str, calibration: tuple[str, ...]) -> Text:
    """What is known of one frame, in three lines and its reason."""
    text = Text.assemble((row.file, "bold"))
    text.append(f"  {row.night}  {ut(row.mjd)} UT  {row.kind}  ")
    text.append(row.state or row.outcome, word_colour(row.state))
    text.append(" by a person" if row.by_person else "")
    text.append(f"  {row.reason}" if row.reason else "")
    parts = [
        f"X {number(row.airmass, 2)}",
        f"FWHM {number(row.fwhm_arcsec, 1)}″",
        f"elongation {number(row.elongation, 2)}",
        f"sky {number(row.sky_e_px, 0)} e-",
        f"{row.n_stars if row.n_stars is not None else UNKNOWN} stars",
        f"S/N {number(row.snr.get(target), 0)}",
    ]
    peak_percent = None if row.peak_fraction is None else 100.0 * row.peak_fraction
    pointing = [
        f"offset {number(row.offset_arcmin, 1)}′",
        f"rotation {number(row.rotation_deg, 1)}°",
        f"{number(row.scale_arcsec, 3)}″/px",
        f"peak {number(peak_percent, 0)} %",
    ]
    if row.zero_point is not None:
        pointing.append(f"ZP {with_error(row.zero_point.zp_mag, row.zero_point.zp_err_mag, 3)}")
    if row.outcome == "measured":
        text.append("\n" + "  ".join(parts) + "\n" + "  ".join(pointing))
        text.append("\n" + " ".join(row.notes) if row.notes else "")
    elif row.outcome == "calibration":
        text.append("".join(f"\n{line}" for line in calibration))
    return text


def decide_on(app: FadelineApp, row: FrameRow | None, value: str) -> None:
    """Keep or drop a frame, or say why that cannot be."""
    if row is None:
        app.say("There is no frame to decide on.")
    elif row.outcome == "calibration":
        app.say("Keep and drop are for frames of the sky, not for calibration frames.")
    elif row.outcome == "not used":
        app.say(f"This frame is {row.reason}.")
    elif value == "keep" and row.outcome in ("no match", "unreadable"):
        app.say(f"This frame has no measurement to keep: {row.reason}")
    elif row.kind == "unknown":
        app.say("This file cannot be read: there is nothing to keep or drop.")
    else:
        app.decide(f"frame:{row.id}", "state", value, f"{'Kept' if value == 'keep' else 'Dropped'} {row.file}")


class FramesScreen(CampaignScreen):
    """What landed, whether it is good, and why not."""

    MODE = "frames"
    BINDINGS: ClassVar = screen_bindings("frames")

    def __init__(self) -> None:
        super().__init__()
        self._filter = FILTERS[0]
        self._rows: dict[str, FrameRow] = {}
        self._pictured = ""

    def body(self) -> ComposeResult:
        """Table beside picture over details."""
        with Horizontal(id="frames-body"):
            yield RowTable("frame", "UT", "b", "state", "s", "FWHM″", "ell", start_at_end=True, id="frames")
            yield Preview(id="preview")
        yield Static("", id="details")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the campaign."""
        rows = filtered(snapshot.frames, self._filter, self.fadeline.target_name)
        self._rows = {row.id: row for row in rows}
        self.query_one(RowTable).show([(row.id, _cells(row)) for row in rows])
        self._show_chosen()

    @on(DataTable.RowHighlighted)
    def follow_cursor(self) -> None:
        """Details and picture belong to the row under the cursor."""
        self._show_chosen()

    def _chosen(self) -> FrameRow | None:
        return self._rows.get(self.query_one(RowTable).chosen())

    def _show_chosen(self) -> None:
        row = self._chosen()
        details, preview = self.query_one("#details", Static), self.query_one(Preview)
        if row is None:
            details.update(Text(f"No frame here ({self._filter}; f shows others)."))
            preview.show(None, (), "", self.fadeline.picture_look)
            self._pictured = ""
            return
        snapshot = self.fadeline.snapshot
        details.update(details_text(row, self.fadeline.target_name, snapshot.calibration if snapshot else ()))
        look = f"{row.id} {self.fadeline.picture_look} {self.fadeline.target_name} {self.fadeline.slow_link}"
        if look != self._pictured:
            self._pictured = look
            if self.fadeline.slow_link:
                preview.show(None, (), SLOW_SENTENCE, self.fadeline.picture_look)
                return
            self.run_worker(self._picture(row), group="picture", exclusive=True, exit_on_error=False)

    async def _picture(self, row: FrameRow) -> None:
        await asyncio.sleep(PREVIEW_WAIT_S)
        preview = self.query_one(Preview)
        look = self.fadeline.picture_look
        try:
            image = await self.fadeline.desk.preview(row.path, PREVIEW_PIXELS, PREVIEW_PIXELS)
        except Exception as error:  # an unreadable file is a sentence in the picture's place
            preview.show(None, (), trouble_sentence(error), look)
            return
        # a small picture has no room for circles, nor for the brackets of a crowd: the full-screen one has
        rings = [replace(ring, radius_px=0.0) for ring in rings_of(row, self.fadeline.target_name)]
        preview.show(image, uncrowded(rings, image.window, preview.size.area, CELLS_A_RING), "", look)

    def action_view(self) -> None:
        """Look at the chosen frame over the whole screen."""
        row = self._chosen()
        if row is None or row.outcome == "unreadable":
            self.fadeline.say("There is no picture to show." if row is None else "This file cannot be read.")
            return
        from tui.screens.picture import PictureScreen

        self.app.push_screen(PictureScreen(list(self._rows), row.id))

    def action_decide_frame(self, value: str) -> None:
        """Keep or drop the chosen frame."""
        decide_on(self.fadeline, self._chosen(), value)

    def action_decide_shown(self, value: str) -> None:
        """Keep or drop all doubtful frames shown, by one decision that one undo takes back."""
        doubtful = [row for row in self._rows.values() if row.state == "doubtful" and not row.by_person]
        if not doubtful:
            self.fadeline.say(f"No doubtful frame is shown ({self._filter}; f shows others).")
            return
        if len(doubtful) == 1:
            decide_on(self.fadeline, doubtful[0], value)
            return
        done = "Kept" if value == "keep" else "Dropped"
        subject = "frames:" + ",".join(row.id for row in doubtful)
        self.fadeline.decide(subject, "state", value, f"{done} {len(doubtful)} doubtful frames")

    def action_next_filter(self) -> None:
        """Show the next choice of frames."""
        self._filter = FILTERS[(FILTERS.index(self._filter) + 1) % len(FILTERS)]
        self.fadeline.say(f"Showing {self._filter}.")
        self.draw()


def _cells(row: FrameRow) -> Cells:
    word = row.state or row.outcome
    return (
        cell(shortened(row.file)), cell(ut(row.mjd)), cell(row.band or "–", band_colour(row.band)),
        cell(word + ("*" if row.provisional else ""), word_colour(row.state)),
        cell(number(row.exposure_s, 0), right=True), cell(number(row.fwhm_arcsec, 1), right=True),
        cell(number(row.elongation, 2), right=True),
    )  # fmt: skip
