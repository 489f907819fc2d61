"""Field: the comparison stars of one band, whether they agree, and what aperture and colour do to them."""

from __future__ import annotations

import math
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
    from collections.abc import Callable, Sequence

    from reduce.records import StarResult, Target
    from reduce.views import FrameRow, SequenceStar, Snapshot, TargetView

_WORD_MARKERS = {"used": "o", "spare": "-", "set aside": "x"}


AGAINST = ("colour", "magnitude", "east", "north")
"""What residuals are drawn against, one after the other: a slope in the first is a colour term, in the second a
detector that is not linear or a wrong sky, in the others a flat field or a changing cloud."""


def residual_marks(stars: Sequence[StarResult], x_of: Callable[[StarResult], float | None]) -> list[Marks]:
    """Residuals against something: used o, spare -, set aside x."""
    marks = []
    for word, marker in _WORD_MARKERS.items():
        told = [(x, s) for s in stars if s.word == word and (x := x_of(s)) is not None]
        if told:
            marks.append(
                Marks(
                    label=f"{marker} {word}",
                    colour=word_colour(word),
                    x=[x for x, _ in told],
                    y=[s.residual_mag for _, s in told],
                    err=[s.rms_mag / max(s.n_frames, 1) ** 0.5 for _, s in told],
                    markers=marker * len(told),
                )
            )
    return marks


def offsets_arcmin(star: SequenceStar, target: Target) -> tuple[float, float]:
    """How far a comparison star lies east and north of the target."""
    east = (star.ra_deg - target.ra_deg + 180.0) % 360.0 - 180.0
    return 60.0 * east * math.cos(math.radians(target.dec_deg)), 60.0 * (star.dec_deg - target.dec_deg)


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
        self._against = AGAINST[0]
        self._stars: dict[str, StarResult] = {}

    def body(self) -> ComposeResult:
        """Table beside two charts over the reason."""
        with Horizontal(id="field-body"):
            yield RowTable("star", "word", "mag", "resid", "rms", "n", id="stars")
            with Vertical(id="field-charts"):
                yield Chart("residual", least_y=0.04, zero_line=True, id="residuals-against")
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
        marks, label = self._residuals(snapshot, view, stars)
        self.query_one("#residuals-against", Chart).show(
            marks, plain=plain, title=self._band, x_label=label, empty="No solution yet."
        )
        kept = [f for f in snapshot.frames if f.band == self._band and f.state == "kept" and f.growth_mag]
        latest = kept[-1] if kept else None
        used = latest.zero_point.aperture_fwhm if latest and latest.zero_point else None
        self.query_one("#growth", Chart).show(
            growth_marks(latest, self._band),
            plain=plain,
            empty="No kept frame yet.",
            title=f"{self._band} growth, aperture {'PSF' if used == 0 else f'{number(used, 2)} FWHM'}",
        )
        self._show_reason()

    def _residuals(
        self, snapshot: Snapshot, view: TargetView | None, stars: Sequence[StarResult]
    ) -> tuple[list[Marks], str]:
        """Marks of the upper chart and the label of its x axis."""
        if self._against == "colour":
            return residual_marks(stars, lambda s: s.colour), "−".join(COLOUR_OF_BAND.get(self._band, ("", "")))
        if self._against == "magnitude":
            return residual_marks(stars, lambda s: s.catalogue_mag), "mag"
        side = ("east", "north").index(self._against)
        offset = {s.id: offsets_arcmin(s, view.target)[side] for s in snapshot.sequence} if view is not None else {}
        return residual_marks(stars, lambda s: offset.get(s.star)), f"{self._against}′"

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

    def action_next_axis(self) -> None:
        """Draw the residuals against the next thing."""
        self._against = AGAINST[(AGAINST.index(self._against) + 1) % len(AGAINST)]
        is_place = self._against not in AGAINST[:2]
        what = f"the place {self._against} of the target, in arcmin" if is_place else self._against
        self.fadeline.say(f"Residuals against {what}.")
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
        from tui.screens.choice import ChoiceScreen

        band = self._band
        words = {"auto": "by signal-to-noise", "0": "PSF", **{f"{r:g}": f"{r:g} FWHM" for r in LADDER_FWHM}}

        def chosen(value: str | None) -> None:
            if value is not None:
                self.fadeline.decide(f"aperture:{band}", "fwhm", value, f"Aperture of {band}: {words[value]}")

        self.app.push_screen(ChoiceScreen(f"Aperture radius in {band}", list(words.items())), chosen)


def _bands(snapshot: Snapshot | None) -> list[str]:
    found = {star.band for star in snapshot.stars} if snapshot else set()
    return [band for band in BANDS if band in found]


def _cells(star: StarResult) -> Cells:
    return (
        cell(star.star),
        cell(star.word, "" if star.word == "used" else word_colour(star.word)),
        cell(number(star.catalogue_mag, 3), right=True),
        cell(number(star.residual_mag, 3, sign=True), right=True),
        cell(number(star.rms_mag, 3), right=True),
        cell(star.n_frames, right=True),
    )
