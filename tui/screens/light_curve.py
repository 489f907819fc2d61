"""Light curve: points with errors, the fit, its residuals, and a cursor to read and exclude points."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.widgets import Static

from reduce.records import BANDS, FLUX_ZERO_POINT
from tui.actions import screen_bindings
from tui.band_look import band_colour, word_colour
from tui.estimate_panel import parameters_text
from tui.number_text import count, number, ut, with_error
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.chart import Chart
from tui.widgets.raster import Line, Marks

if TYPE_CHECKING:
    from reduce.records import Estimate, Point
    from reduce.views import Snapshot, TargetView

LIMIT_SIGMA = 3.0  # common practice


def drawn_mag(point: Point) -> float:
    """Magnitude at which a point is drawn; for a non-detection its three-sigma limit, NaN without one."""
    if point.mag is not None:
        return point.mag
    brightest = max(point.flux, 0.0) + LIMIT_SIGMA * point.flux_err
    return FLUX_ZERO_POINT - 2.5 * math.log10(brightest) if brightest > 0 else math.nan


def marker(point: Point, plain: bool) -> str:
    """The band's letter; another sign when the point is excluded, dropped, doubtful or a limit."""
    if point.state == "limit":
        return "v" if plain else "↓"
    return {"excluded": "x", "dropped": "x", "doubtful": "?"}.get(point.state, point.band[:1])


def marks_of(points: Sequence[Point], plain: bool) -> list[Marks]:
    """One set of marks a band."""
    marks = []
    for band in sorted({p.band for p in points}, key=_band_order):
        mine = [p for p in points if p.band == band]
        marks.append(
            Marks(
                label=band,
                colour=band_colour(band),
                x=[p.mjd for p in mine],
                y=[drawn_mag(p) for p in mine],
                err=[math.nan if p.mag is None or p.err is None else p.err for p in mine],
                markers="".join(marker(p, plain) for p in mine),
            )
        )
    return marks


def residual_marks(estimate: Estimate, bands: Sequence[str]) -> list[Marks]:
    """Residuals of the fit, one set of marks a band; points the fit rejected are crosses."""
    marks = []
    for band in bands:
        mine = [p for p in estimate.points if p.band == band]
        marks.append(
            Marks(
                label="",
                colour=band_colour(band),
                x=[p.mjd for p in mine],
                y=[p.residual_mag for p in mine],
                err=[p.sigma_mag for p in mine],
                markers="".join("x" if p.rejected else band[:1] for p in mine),
            )
        )
    return marks


def reading_text(point: Point, estimate: Estimate | None) -> Text:
    """Everything known of one point, in one or two lines."""
    text = Text.assemble((f"{point.band} ", f"bold {band_colour(point.band)}"))
    text.append(f"{point.night} {ut(point.mjd)} UT  MJD {point.mjd:.4f}  ")
    if point.mag is None:
        text.append(f"not seen, fainter than {number(drawn_mag(point), 2)} (3 σ)  ")
    else:
        text.append(f"{with_error(point.mag, point.err, 3)} mag", "bold")
        text.append(f"  night {number(point.err_night, 3)}  band {number(point.err_band, 3)}  ")
    text.append(point.state, word_colour(point.state))
    text.append(f"  {count(point.n_frames, 'frame')}")
    fitted = (
        next((p for p in estimate.points if (p.night, p.band) == (point.night, point.band)), None) if estimate else None
    )
    if fitted is not None:
        text.append(f"  day {fitted.phase_d:+.1f}  residual {fitted.residual_mag:+.3f}")
        text.append("  rejected by the fit" if fitted.rejected else "")
    text.append("".join(f"  {flag}" for flag in point.flags))
    return text


def _band_order(band: str) -> int:
    return BANDS.index(band) if band in BANDS else len(BANDS)


class LightCurveScreen(CampaignScreen, inherit_bindings=False):
    """The curve, and every point within reach; nothing here scrolls, so ← and → are free for the points."""

    MODE = "light_curve"
    BINDINGS: ClassVar = screen_bindings("light_curve")

    def __init__(self) -> None:
        super().__init__()
        self._band = ""
        self._cursor: tuple[str, str] | None = None

    def body(self) -> ComposeResult:
        """Chart over residuals over the reading; on a wide screen the parameters beside them."""
        with Horizontal(id="curve-body"):
            with Vertical(id="curve-charts"):
                yield Chart("mag", invert_y=True, least_y=0.5, x_axis=False, id="curve")
                yield Chart("O−C", least_y=0.2, legend=False, x_label="MJD", zero_line=True, id="residuals")
            with Vertical(id="curve-side"):
                yield Static("", id="curve-parameters")
        yield Static("", id="reading")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the chosen target."""
        points, estimate = self._points(), view.estimate if view else None
        plain = self.fadeline.plain
        chosen = self._chosen()
        bands = sorted({p.band for p in points}, key=_band_order)
        # four bands of dotted edges on a small screen hide the points
        with_sigma = len(bands) == 1 or self.has_class("-wide")
        lines = [
            Line(band_colour(c.band), c.mjd, c.mag, c.sigma_mag if with_sigma else None)
            for c in (estimate.curves if estimate else ())
            if c.band in bands
        ]
        curve, residuals = self.query_one("#curve", Chart), self.query_one("#residuals", Chart)
        shown = f"band {self._band}" if self._band else "all bands"
        curve.show(
            marks_of(points, plain), lines, plain=plain, title=f"mag, {shown}", empty="No point yet.",
            cursor=(chosen.mjd, drawn_mag(chosen)) if chosen else None,
        )  # fmt: skip
        limits = curve.limits()
        residuals.show(
            residual_marks(estimate, bands) if estimate else [], plain=plain, x_limits=(limits.x0, limits.x1),
            empty="No fit, so no residuals.",
        )  # fmt: skip
        reading = reading_text(chosen, estimate) if chosen else Text("← and → move over the points.")
        self.query_one("#reading", Static).update(reading)
        self.query_one("#curve-parameters", Static).update(parameters_text(view))

    def _points(self) -> list[Point]:
        view = self.fadeline.view
        points = view.night_points if view else ()
        mine = [p for p in points if not self._band or p.band == self._band]
        return sorted(mine, key=lambda p: (p.mjd, _band_order(p.band)))

    def _chosen(self) -> Point | None:
        return next((p for p in self._points() if (p.night, p.band) == self._cursor), None)

    def action_move_cursor(self, step: int) -> None:
        """Move over the points; the first press takes the newest."""
        points, chosen = self._points(), self._chosen()
        if not points:
            return
        index = len(points) - 1 if chosen is None else min(max(points.index(chosen) + step, 0), len(points) - 1)
        self._cursor = (points[index].night, points[index].band)
        self.draw()

    def action_next_band(self) -> None:
        """Show the next band alone, after the last all of them."""
        view = self.fadeline.view
        choices = ["", *sorted({p.band for p in view.night_points}, key=_band_order)] if view else [""]
        self._band = choices[(choices.index(self._band) + 1) % len(choices)] if self._band in choices else ""
        self.draw()

    def action_exclude(self) -> None:
        """Exclude the point under the cursor, or restore it."""
        point = self._chosen()
        if point is None:
            self.fadeline.say("Choose a point first: ← and → move over them.")
            return
        back = point.state == "excluded"
        self.fadeline.decide(
            f"point:{point.star}:{point.night}:{point.band}",
            "exclude",
            "no" if back else "yes",
            f"{'Restored' if back else 'Excluded'} {point.band} of {point.night}",
        )
