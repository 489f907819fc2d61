"""Field: the comparison stars of one band, whether they agree, and what aperture and colour do to them."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.widgets import DataTable, Static

from reduce.records import BANDS, COLOUR_OF_BAND, LADDER_FWHM
from tui.actions import screen_bindings
from tui.band_look import band_colour, word_colour
from tui.number_text import number, with_error
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.chart import Chart
from tui.widgets.raster import Marks
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from collections.abc import Sequence

    from reduce.records import StarResult
    from reduce.views import FrameRow, Snapshot, TargetView

_WORD_MARKERS = {"used": "o", "spare": "-", "set aside": "x"}


def colour_marks(stars: Sequence[StarResult]) -> list[Marks]:
    """Residual against colour: used o, spare -, set aside x."""
    return [
        Marks(
            label=f"{marker} {word}",
            colour=word_colour(word),
            x=[s.colour for s in mine],
            y=[s.residual_mag for s in mine],
            err=[s.rms_mag / max(s.n_frames, 1) ** 0.5 for s in mine],
            markers=marker * len(mine),
        )
        for word, marker in _WORD_MARKERS.items()
        if (mine := [s for s in stars if s.word == word])
    ]


def growth_marks(frame: FrameRow | None, band: str) -> list[Marks]:
    """Aperture correction against radius on one frame."""
    if frame is None:
        return []
    n = min(len(frame.growth_mag), len(LADDER_FWHM))
    return [Marks("", band_colour(band), LADDER_FWHM[:n], frame.growth_mag[:n], None, band[:1] * n)]


class FieldScreen(CampaignScreen):
    """Comparison stars: used, spare or set aside."""

    MODE = "field"
    BINDINGS: ClassVar = screen_bindings("field")

    def __init__(self) -> None:
        super().__init__()
        self._band = ""
        self._stars: dict[str, StarResult] = {}

    def body(self) -> ComposeResult:
        """Table beside two charts over the reason."""
        with Horizontal(id="field-body"):
            yield RowTable("star", "word", "mag", "resid", "rms", "n", id="stars")
            with Vertical(id="field-charts"):
                yield Chart("residual", least_y=0.04, zero_line=True, id="against-colour")
                yield Chart("growth", least_y=0.05, x_label="FWHM", id="growth")
        yield Static("", id="star-reason")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the comparison stars of the shown band."""
        bands = _bands(snapshot)
        if self._band not in bands:
            self._band = "V" if "V" in bands else bands[0] if bands else ""
        stars = [s for s in snapshot.stars if s.band == self._band]
        self._stars = {s.star: s for s in stars}
        self.query_one(RowTable).show([(s.star, _cells(s)) for s in stars])
        plain = self.fadeline.plain
        index = "−".join(COLOUR_OF_BAND.get(self._band, ("", "")))
        self.query_one("#against-colour", Chart).show(
            colour_marks(stars), plain=plain, title=self._band, x_label=index, empty="No solution yet."
        )
        kept = [f for f in snapshot.frames if f.band == self._band and f.state == "kept" and f.growth_mag]
        latest = kept[-1] if kept else None
        used = latest.zero_point.aperture_fwhm if latest and latest.zero_point else None
        self.query_one("#growth", Chart).show(
            growth_marks(latest, self._band),
            plain=plain,
            empty="No kept frame yet.",
            title=f"{self._band} growth, aperture {number(used, 2)} FWHM",
        )
        self._show_reason()

    @on(DataTable.RowHighlighted)
    def follow_cursor(self) -> None:
        """The reason belongs to the star under the cursor."""
        self._show_reason()

    def _show_reason(self) -> None:
        star = self._stars.get(self.query_one(RowTable).chosen())
        text = Text.assemble((f"Band {self._band or '–'} ", f"bold {band_colour(self._band)}"))
        if star is not None:
            text.append(f" {star.star}: {star.word}")
            text.append(f", {star.reason}" if star.reason else "")
            text.append(f"  colour {number(star.colour, 2, sign=True)}")
        snapshot = self.fadeline.snapshot
        for term in snapshot.colour_terms if snapshot else ():
            if term.band == self._band:
                how = "fitted" if term.fitted else "assumed"
                value = with_error(term.term, term.term_err, 3)
                text.append(
                    f"\n{term.camera or 'camera'}: colour term {value}, {how}",
                    "not bold",
                )
        self.query_one("#star-reason", Static).update(text)

    def action_next_band(self) -> None:
        """Show the next band."""
        bands = _bands(self.fadeline.snapshot)
        if bands:
            self._band = bands[(bands.index(self._band) + 1) % len(bands)] if self._band in bands else bands[0]
            self.draw()

    def action_set_aside(self) -> None:
        """Set the chosen star aside in all bands, or use it again."""
        star = self._stars.get(self.query_one(RowTable).chosen())
        if star is None:
            self.fadeline.say("There is no comparison star to set aside.")
            return
        back = star.word == "set aside"
        words = f"{star.star} is used again" if back else f"Set {star.star} aside"
        self.fadeline.decide(f"star:{star.star}", "use", "use" if back else "set aside", words)

    def action_aperture(self) -> None:
        """Choose the aperture of the shown band."""
        if not self._band:
            self.fadeline.say("There is no band yet to choose an aperture for.")
            return
        from tui.screens.aperture import ApertureScreen

        band = self._band

        def chosen(value: str | None) -> None:
            if value is not None:
                radius = "chosen by signal-to-noise" if value == "auto" else f"{value} FWHM"
                self.fadeline.decide(f"aperture:{band}", "fwhm", value, f"Aperture of {band}: {radius}")

        self.app.push_screen(ApertureScreen(band), chosen)


def _bands(snapshot: Snapshot | None) -> list[str]:
    found = {star.band for star in snapshot.stars} if snapshot else set()
    return [band for band in BANDS if band in found]


def _cells(star: StarResult) -> Cells:
    return (
        cell(star.star),
        cell(star.word, word_colour(star.word)),
        cell(number(star.catalogue_mag, 3), right=True),
        cell(number(star.residual_mag, 3, sign=True), right=True),
        cell(number(star.rms_mag, 3), right=True),
        cell(star.n_frames, right=True),
    )
