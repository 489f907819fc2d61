"""Frames: every frame with its verdict, a picture of the chosen one, and the last word by a person."""

from __future__ import annotations

import asyncio
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
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.preview import Preview
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from reduce.views import FrameRow, Snapshot, TargetView

FILTERS = ("this target", "wants you", "all frames")
NAME_WIDTH = 16
PREVIEW_PIXELS = 128
"""Asked for whatever the size of the widget, which shrinks it further; a resize needs no new picture."""
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
    elif row.outcome == "calibration":
        text.append("".join(f"\n{line}" for line in calibration))
    return text


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
            preview.show(None, (), "", self.fadeline.plain)
            self._pictured = ""
            return
        snapshot = self.fadeline.snapshot
        details.update(details_text(row, self.fadeline.target_name, snapshot.calibration if snapshot else ()))
        look = f"{row.id} {self.fadeline.plain}"
        if look != self._pictured:
            self._pictured = look
            self.run_worker(self._picture(row), group="picture", exclusive=True, exit_on_error=False)

    async def _picture(self, row: FrameRow) -> None:
        await asyncio.sleep(PREVIEW_WAIT_S)
        preview = self.query_one(Preview)
        plain = self.fadeline.plain or self.fadeline.plain_pictures
        try:
            image = await self.fadeline.desk.preview(row.path, PREVIEW_PIXELS, PREVIEW_PIXELS)
        except Exception as error:  # an unreadable file is a sentence in the picture's place
            preview.show(None, (), trouble_sentence(error), plain)
            return
        target = self.fadeline.target_name
        rings = [(x, y, "[]", "#56b4e9") for name, (x, y) in row.pixel.items() if name not in row.targets]
        rings += [(x, y, "()", "#e69f00") for name, (x, y) in row.pixel.items() if name == target]
        preview.show(image, rings, "", plain)

    def action_decide_frame(self, value: str) -> None:
        """Keep or drop the chosen frame."""
        row = self._chosen()
        if row is None:
            self.fadeline.say("There is no frame to decide on.")
        elif row.outcome == "calibration":
            self.fadeline.say("Keep and drop are for frames of the sky, not for calibration frames.")
        elif row.kind == "unknown":
            self.fadeline.say("This file cannot be read: there is nothing to keep or drop.")
        else:
            self.fadeline.decide(
                f"frame:{row.id}", "state", value, f"{'Kept' if value == 'keep' else 'Dropped'} {row.file}"
            )

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
