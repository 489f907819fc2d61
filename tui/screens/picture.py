"""Picture: one frame over the whole screen, to look at, point at and compare with another."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.widgets import Footer, Static

from reduce.records import LADDER_FWHM
from tui.actions import ACTIONS, screen_bindings
from tui.band_look import OTHER_COLOUR, band_colour, word_colour
from tui.messages import trouble_sentence
from tui.number_text import ut
from tui.picture_view import TARGET_BRACKETS, View, next_star, other_frame, rings_of, star_near, star_text, uncrowded
from tui.preview_image import Laid, PreviewImage, Window
from tui.screens.campaign_screen import CampaignScreen
from tui.screens.frames import decide_on, shortened
from tui.widgets.chart import Chart
from tui.widgets.preview import Preview
from tui.widgets.raster import Line, Marks

if TYPE_CHECKING:
    from collections.abc import Sequence

    from reduce.views import FrameRow, RadialProfile, Snapshot, StarReading, TargetView

Source = str
FRAME, OTHER, DIFFERENCE = "frame", "other", "difference"
CELLS_NEAR = 2.0
"""A star this far from the cursor is still meant."""
CELLS_A_RING = 20
"""With fewer cells of the picture for each mark, comparison stars are marked from the next zoom on."""
CROWDED_OUT = ("note", "step_target(1)", "quit")
"""They work here as everywhere, but eighty columns do not hold them beside the picture's own keys."""
TARGET_ZOOM = 2
"""Halvings of the frame at which a target and its host are seen."""
PROFILE_FWHM = 4.0
PATIENCE_S = 0.4
"""A longer wait is explained."""
UNKNOWN_PROFILE_PX = 12.0
"""Of a frame whose FWHM is not known."""


def profile_marks(profile: RadialProfile, plain: bool) -> tuple[list[Marks], list[Line]]:
    """Every pixel as a dot and the median of the rings as a line."""
    dots = ("." if plain else "·") * len(profile.radius_px)
    marks = [Marks("", OTHER_COLOUR, profile.radius_px, profile.light_adu, None, dots)] if profile.radius_px else []
    return marks, [Line("#e69f00", profile.ring_px, profile.ring_adu)] if profile.ring_px else []


class PictureScreen(CampaignScreen, inherit_bindings=False):
    """One frame; the arrow keys move the cursor, and the picture follows it."""

    MODE = "picture"
    BINDINGS: ClassVar = [
        *screen_bindings("picture"),
        *(
            replace(action.binding(), action=f"app.{action.call}", show=False)
            for action in ACTIONS
            if action.call in CROWDED_OUT
        ),
    ]

    def __init__(self, frames: Sequence[str], chosen: str) -> None:
        super().__init__()
        self._frames, self._chosen = list(frames), chosen
        self._view: View | None = None
        self._cursor = (0.0, 0.0)
        self._source: Source = FRAME
        """What was asked for last."""
        self._shown_source: Source = FRAME
        self._images: dict[tuple[Source, Window], PreviewImage] = {}
        """Of the part that is shown: going to and fro fetches nothing again."""
        self._shown: PreviewImage | None = None
        self._sentence = ""
        self._stars: tuple[StarReading, ...] | None = None
        self._stars_of = -1
        self._picked: StarReading | None = None

    def compose(self) -> ComposeResult:
        """Title, picture beside the picked star's charts, reading, status line, footer."""
        yield Static("", id="picture-title")
        yield from self.body()
        yield Static("", id="status")
        yield Footer(compact=True, show_command_palette=False)

    def body(self) -> ComposeResult:
        """Picture, charts, reading."""
        with Horizontal(id="picture-body"):
            yield Preview(id="picture")
            with Vertical(id="picture-side"):
                yield Chart("profile", least_y=1.0, x_label="px", id="profile")
                yield Chart("growth", least_y=0.05, x_label="FWHM", id="star-growth")
        yield Static("", id="star-reading")

    # ---- drawing -----------------------------------------------------------------------------------------

    @property
    def _row(self) -> FrameRow | None:
        snapshot = self.fadeline.snapshot
        return next((row for row in snapshot.frames if row.id == self._chosen), None) if snapshot else None

    def on_mount(self) -> None:
        """Fetch the picture and say that nothing is picked."""
        self._show_picked(None)
        self._fetch()

    def on_resize(self) -> None:
        """Another size shows another part of the frame, in blocks of another size."""
        self._images.clear()
        self._fetch()

    def draw(self) -> None:
        """Draw title, marks and cursor; the picture itself only changes with what is looked at."""
        if self.is_mounted and self.fadeline.snapshot is not None:
            self.show(self.fadeline.snapshot, self.fadeline.view)

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw what stands."""
        row = self._row
        if row is None:
            self._sentence = "This frame is not in the campaign any more."
        look = self.fadeline.picture_look
        rings = rings_of(row, self.fadeline.target_name) if row is not None else []
        if self._shown_source == DIFFERENCE:  # stars that were taken off need no marks
            rings = [ring for ring in rings if ring.brackets == TARGET_BRACKETS]
        self.query_one("#picture-title", Static).update(self._title(row))
        picture = self.query_one("#picture", Preview)
        if self._shown is not None:
            rings = uncrowded(rings, self._shown.window, picture.size.area, CELLS_A_RING)
        picture.show(self._shown, rings, self._sentence, look, self._cursor if self._view else None)
        if self._picked is None:
            x_px, y_px = self._cursor
            words = f"x {x_px:5.0f} y {y_px:5.0f}   enter reads the star at the cursor, . goes to the next"
            self.query_one("#star-reading", Static).update(words if self._view else "")

    def _title(self, row: FrameRow | None) -> Text:
        """What is shown, in one line."""
        if row is None:
            return Text("")
        other = self._other() if self._shown_source == OTHER else None
        text = Text(no_wrap=True, overflow="ellipsis").append(" ")
        if other is not None:
            what = "Reference" if other.kind == "reference" else "Instead"
            text.append(f"{what} {shortened(other.file)} of {other.night}", "reverse").append(" laid on ")
        text.append(shortened(row.file) if other else row.file, "bold")
        text.append(f"  {row.band or '–'}", f"bold {band_colour(row.band)}")
        if other is None:
            text.append(f"  {row.night} {ut(row.mjd)} UT  ").append(row.state or row.outcome, word_colour(row.state))
        text.append(f"  ×{2**self._view.zoom}" if self._view and self._view.zoom else "  whole frame")
        if self._shown_source == DIFFERENCE:
            text.append("  ").append("minus its reference", "reverse")
        return text

    def _other(self) -> FrameRow | None:
        snapshot, row = self.fadeline.snapshot, self._row
        return other_frame(snapshot.frames, row) if snapshot is not None and row is not None else None

    # ---- fetching ----------------------------------------------------------------------------------------

    def _fetch(self) -> None:
        self.run_worker(self._show_image(), group="picture", exclusive=True, exit_on_error=False)

    async def _show_image(self) -> None:
        row = self._row
        if row is None:
            self.draw()
            return
        picture = self.query_one("#picture", Preview)
        columns, rows = max(picture.size.width, 2), max(picture.size.height, 1)
        window = self._view.window(columns, rows) if self._view else None
        try:
            image = self._images.get((self._source, window)) if window is not None else None
            if image is None:
                # braille has the most dots: 2 × 4 a cell
                image = await self._image(row, window, 2 * columns, 4 * rows)
        except Exception as error:  # a sentence, and the frame itself again
            self._complain(error)
            return
        if self._view is None:
            self._view = View(image.frame_nx, image.frame_ny, (image.frame_nx / 2, image.frame_ny / 2))
            at = row.pixel.get(self.fadeline.target_name, self._view.centre)
            self._cursor = self._view.held(*at)
        if not any(key[1] == image.window for key in self._images):
            self._images.clear()
        self._images[self._source, image.window] = self._shown = image
        self._shown_source = self._source
        self._sentence = ""
        self.draw()

    async def _image(self, row: FrameRow, window: Window | None, nx: int, ny: int) -> PreviewImage:
        desk, view, other = self.fadeline.desk, self._view, self._other()
        if self._source == DIFFERENCE and view is not None:
            size = view.frame_nx, view.frame_ny
            return await desk.difference(row.id, self.fadeline.target_name, size, nx, ny, window)
        if self._source == OTHER and view is not None and other and other.solution and row.solution:
            laid = Laid(other.path, other.solution, row.solution, view.frame_nx, view.frame_ny)
            return await desk.preview(row.path, nx, ny, window, laid)
        return await desk.preview(row.path, nx, ny, window)

    def _complain(self, error: Exception) -> None:
        if self._source == FRAME:
            self._shown, self._sentence = None, trouble_sentence(error)
            self.draw()
            return
        self.fadeline.say(trouble_sentence(error), trouble=True)
        self._source = FRAME
        self._fetch()

    # ---- moving ------------------------------------------------------------------------------------------

    def action_cursor(self, across: int, up: int) -> None:
        """Move by one cell; at the edge of a part of the frame the part moves on."""
        place = self.query_one("#picture", Preview).place()
        if self._view is None or place is None:
            return
        row, column = place.cell_of(*self._cursor)
        self._go_to(*self._view.held(*place.position_of(row - up, column + across)))

    def _go_to(self, x_px: float, y_px: float) -> None:
        self._cursor = (x_px, y_px)
        if self._picked is not None:
            self._show_picked(None)
        place = self.query_one("#picture", Preview).place()
        if self._view is not None and place is not None and not place.holds(*place.cell_of(x_px, y_px)):
            self._view = View(self._view.frame_nx, self._view.frame_ny, (x_px, y_px), self._view.zoom)
            self._fetch()
        else:
            self.draw()

    def action_zoom(self, step: int) -> None:
        """Nearer to the cursor, or farther."""
        if self._view is not None:
            self._view = self._view.zoomed(step, self._cursor)
            self._fetch()

    def action_whole(self) -> None:
        """The whole frame."""
        if self._view is not None:
            self.action_zoom(-self._view.zoom)

    def action_centre(self) -> None:
        """The target in the middle."""
        if self._view is None:
            return
        row = self._row
        at = row.pixel.get(self.fadeline.target_name) if row is not None else None
        if at is None:
            self.fadeline.say(f"{self.fadeline.target_name or 'The target'} is not on this frame.")
            return
        self._cursor = self._view.held(*at)
        self._view = self._view.zoomed(max(TARGET_ZOOM - self._view.zoom, 0), self._cursor)
        self._fetch()

    def action_step_frame(self, step: int) -> None:
        """Another frame of the list, at the same place of the picture."""
        if self._chosen in self._frames and 0 <= self._frames.index(self._chosen) + step < len(self._frames):
            self._chosen = self._frames[self._frames.index(self._chosen) + step]
            self._images.clear()
            self._stars, self._source = None, FRAME
            self._show_picked(None)
            self._fetch()
        else:
            self.fadeline.say("There is no further frame in this list.")

    # ---- comparing ---------------------------------------------------------------------------------------

    def action_blink(self) -> None:
        """The frame, another frame laid on its pixels, their difference, and the frame again."""
        other = self._other()
        if other is None:
            self.fadeline.say("There is no other measured frame in this band to compare with.")
            return
        sources = (FRAME, OTHER, DIFFERENCE) if other.kind == "reference" else (FRAME, OTHER)
        self._source = sources[(sources.index(self._source) + 1) % len(sources)]
        if self._source == DIFFERENCE and self._view is not None and self._view.zoom < TARGET_ZOOM:
            self.action_centre()  # it is known about the target only
        else:
            self._fetch()

    def action_dots(self) -> None:
        """Shades of grey, or dots."""
        self.fadeline.change_picture_look()
        self.draw()

    # ---- reading stars -----------------------------------------------------------------------------------

    def action_read(self) -> None:
        """Read the star at the cursor."""
        self.run_worker(self._read(0), group="read", exclusive=True, exit_on_error=False)

    def action_next_star(self, step: int) -> None:
        """Go to the next named star and read it."""
        self.run_worker(self._read(step), group="read", exclusive=True, exit_on_error=False)

    async def _read(self, step: int) -> None:
        row, place = self._row, self.query_one("#picture", Preview).place()
        if row is None or place is None:
            return
        try:
            stars = await self._readings(row)
            star = next_star(stars, *self._cursor, step) if step else star_near(stars, *self._cursor, self._reach(row))
            if star is None:
                none = "No star with a name was measured on this frame." if step else "No measured star at the cursor."
                self.fadeline.say(none)
                return
            self._go_to(star.x_px, star.y_px)
            fwhm_px = star.fwhm_arcsec / row.scale_arcsec if star.fwhm_arcsec and row.scale_arcsec else None
            radius = PROFILE_FWHM * fwhm_px if fwhm_px else UNKNOWN_PROFILE_PX
            profile = await self.fadeline.desk.profile(row.path, star.x_px, star.y_px, radius)
        except Exception as error:  # a sentence on the status line
            self.fadeline.say(trouble_sentence(error), trouble=True)
            return
        self._show_picked(star, profile, band_colour(row.band))

    def _reach(self, row: FrameRow) -> float:
        place = self.query_one("#picture", Preview).place()
        cells = CELLS_NEAR * max(place.pixels_x, place.pixels_y / 2) if place else 0.0
        fwhm_px = row.fwhm_arcsec / row.scale_arcsec if row.fwhm_arcsec and row.scale_arcsec else 0.0
        return max(cells, fwhm_px)

    async def _readings(self, row: FrameRow) -> tuple[StarReading, ...]:
        stamp = self.fadeline.snapshot.stamp if self.fadeline.snapshot else 0
        if self._stars is None or self._stars_of != stamp:
            asked = asyncio.ensure_future(self.fadeline.desk.star_readings(row.id))
            done, _ = await asyncio.wait({asked}, timeout=PATIENCE_S)
            if not done:  # the worker is busy with the campaign's own picture
                self.fadeline.say("The logbook is being read …")
            self._stars, self._stars_of = await asked, stamp
            if not done:
                self.fadeline.say("")
        return self._stars

    def _show_picked(self, star: StarReading | None, profile: RadialProfile | None = None, colour: str = "") -> None:
        """Reading and charts of the picked star."""
        self._picked, plain = star, self.fadeline.plain
        marks, lines = profile_marks(profile, plain) if profile is not None else ([], [])
        self.query_one("#profile", Chart).show(
            marks, lines, plain=plain, title="ADU above sky", empty="No star is picked." if star is None else "Off it."
        )
        n = min(len(star.growth_mag), len(LADDER_FWHM)) if star is not None else 0
        growth = [Marks("", colour, LADDER_FWHM[:n], star.growth_mag[:n], None, "o" * n)] if star and n else []
        self.query_one("#star-growth", Chart).show(growth, plain=plain, title="growth, mag", empty="")
        if star is not None:
            self.query_one("#star-reading", Static).update(star_text(star))

    # ---- deciding ----------------------------------------------------------------------------------------

    def action_decide_frame(self, value: str) -> None:
        """Keep or drop this frame."""
        decide_on(self.fadeline, self._row, value)

    def action_leave(self) -> None:
        """Back to the table of frames."""
        self.app.pop_screen()
