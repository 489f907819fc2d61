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
from tui.folding import folded_lines, phase_of, repeated_lines
from tui.number_text import count, number, ut, with_error
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.chart import Chart
from tui.widgets.raster import Line, Marks

if TYPE_CHECKING:
    from reduce.records import Estimate, Point, Pulsation
    from reduce.views import Snapshot, TargetView

HOST_WAYS = {
    "auto": "the best there is",
    "reference": "a reference without the target, subtracted",
    "mirrored": "the host's other side, subtracted",
    "bent annulus": "a curved sky close about the target",
    "annulus": "as measured on the frame",
}
LIMIT_SIGMA = 3.0  # common practice
LEAST_DAYS = 0.05
"""A chart is not drawn nearer."""


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


def marks_of(points: Sequence[Point], plain: bool, star: Pulsation | None = None) -> list[Marks]:
    """One set of marks a band, against time; with a pulsating star, against two cycles of its phase."""
    marks = []
    for band in sorted({p.band for p in points}, key=_band_order):
        mine = [p for p in points if p.band == band]
        x = [p.mjd for p in mine]
        if star is not None:
            x = [phase_of(p, star) + cycle for cycle in (0, 1) for p in mine]
            mine = mine * 2
        marks.append(
            Marks(
                label=band,
                colour=band_colour(band),
                x=x,
                y=[drawn_mag(p) for p in mine],
                err=[math.nan if p.mag is None or p.err is None else p.err for p in mine],
                markers="".join(marker(p, plain) for p in mine),
            )
        )
    return marks


def residual_marks(estimate: Estimate, bands: Sequence[str], star: Pulsation | None = None) -> list[Marks]:
    """Residuals of the fit, one set of marks a band; points the fit rejected are crosses."""
    marks = []
    for band in bands:
        mine = [p for p in estimate.points if p.band == band]
        x = [p.mjd for p in mine]
        if star is not None:
            x = [p.phase_d / star.period_d + cycle for cycle in (0, 1) for p in mine]
            mine = mine * 2
        marks.append(
            Marks(
                label="",
                colour=band_colour(band),
                x=x,
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
        text.append(f"{with_error(point.mag, point.err, 3)} mag")
        text.append(f"  night {number(point.err_night, 3)}  band {number(point.err_band, 3)}  ")
    text.append(point.state, word_colour(point.state))
    text.append(f"  {count(point.n_frames, 'frame')}")
    text.append("" if point.host_method == "annulus" else f"  host: {point.host_method}")
    fitted = (
        next((p for p in estimate.points if (p.mjd, p.band) == (point.mjd, point.band)), None) if estimate else None
    )
    if fitted is not None:
        star = estimate.pulsation if estimate else None
        when = f"day {fitted.phase_d:+.1f}" if star is None else f"phase {fitted.phase_d / star.period_d:.3f}"
        text.append(f"  {when}  residual {fitted.residual_mag:+.3f}")
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
        self._hidden: frozenset[str] = frozenset()
        self._time: tuple[float, float] | None = None
        self._cursor: tuple[float, str] | None = None
        self._folded = True

    def body(self) -> ComposeResult:
        """Chart over residuals over the reading; on a wide screen the parameters beside them."""
        with Horizontal(id="curve-body"):
            with Vertical(id="curve-charts"):
                yield Chart("mag", invert_y=True, least_y=0.5, x_axis=False, id="curve")
                yield Chart(
                    "O−C", least_y=0.2, legend=False, x_label="MJD", zero_line=True, symmetric=True, id="residuals"
                )
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
        curves = [c for c in (estimate.curves if estimate else ()) if c.band in bands]
        pulsation = estimate.pulsation if estimate else None
        star = pulsation if self._folded else None
        if star is not None:
            lines = folded_lines(curves, with_sigma)
        elif pulsation is not None:
            lines = repeated_lines(curves, points, pulsation.period_d)
        else:
            lines = [Line(band_colour(c.band), c.mjd, c.mag, c.sigma_mag if with_sigma else None) for c in curves]
        curve, residuals = self.query_one("#curve", Chart), self.query_one("#residuals", Chart)
        times = (0.0, 2.0) if star else self._time
        shown = f"band {bands[0]}" if len(bands) == 1 else "all bands"
        if self._hidden and len(bands) > 1:
            shown = f"without {' '.join(sorted(self._hidden, key=_band_order))}"
        curve.show(
            marks_of(points, plain, star), lines, plain=plain, title=f"mag, {shown}", empty="No point yet.",
            cursor=(phase_of(chosen, star) if star else chosen.mjd, drawn_mag(chosen)) if chosen else None,
            x_limits=times,
        )  # fmt: skip
        limits = curve.limits()
        residuals.show(
            residual_marks(estimate, bands, star) if estimate else [], plain=plain, x_limits=(limits.x0, limits.x1),
            empty="No fit, so no residuals.", x_label=f"phase, P = {star.period_d:.6g} d" if star else "MJD",
        )  # fmt: skip
        reading = reading_text(chosen, estimate) if chosen else Text("← and → move over the points.")
        self.query_one("#reading", Static).update(reading)
        self.query_one("#curve-parameters", Static).update(parameters_text(view))

    def _points(self) -> list[Point]:
        view = self.fadeline.view
        points = view.night_points if view else ()
        mine = [p for p in points if p.band not in self._hidden]
        return sorted(mine, key=lambda p: (p.mjd, _band_order(p.band)))

    def _chosen(self) -> Point | None:
        return next((p for p in self._points() if (p.mjd, p.band) == self._cursor), None)

    def action_move_cursor(self, step: int) -> None:
        """Move over the points; the first press takes the newest."""
        points, chosen = self._points(), self._chosen()
        if not points:
            return
        index = len(points) - 1 if chosen is None else min(max(points.index(chosen) + step, 0), len(points) - 1)
        self._cursor = (points[index].mjd, points[index].band)
        if self._time is not None and not self._time[0] <= points[index].mjd <= self._time[1]:
            half = 0.5 * (self._time[1] - self._time[0])
            self._time = (points[index].mjd - half, points[index].mjd + half)
        self.draw()

    def action_fold(self) -> None:
        """Against phase, or against time."""
        estimate = self.fadeline.view.estimate if self.fadeline.view else None
        if estimate is None or estimate.pulsation is None:
            self.fadeline.say("Only a Cepheid or RR Lyrae star with a period can be folded.")
            return
        self._folded = not self._folded
        self.draw()

    def action_next_band(self) -> None:
        """Show the next band alone, after the last all of them."""
        bands = self._all_bands()
        alone = [band for band in bands if band not in self._hidden]
        following = bands.index(alone[0]) + 1 if len(alone) == 1 and len(bands) > 1 else 0
        only = bands[following] if following < len(bands) else None
        self._hidden = frozenset(band for band in bands if only is not None and band != only)
        self.draw()

    def action_toggle_band(self, band: str) -> None:
        """Show or hide one band."""
        if band not in self._all_bands():
            self.fadeline.say(f"There is no point in band {band}.")
            return
        self._hidden ^= {band}
        self.draw()

    def _all_bands(self) -> list[str]:
        view = self.fadeline.view
        return sorted({p.band for p in view.night_points}, key=_band_order) if view else []

    def action_zoom_time(self, step: int) -> None:
        """Half or twice the days, about the point under the cursor; 0 shows all."""
        estimate = self.fadeline.view.estimate if self.fadeline.view else None
        if self._folded and estimate is not None and estimate.pulsation is not None:
            self.fadeline.say("The folded curve shows two cycles; f shows it against time.")
            return
        points, chosen = self._points(), self._chosen()
        if step == 0 or not points:
            self._time = None
        else:
            now = self.query_one("#curve", Chart).limits()
            middle = 0.5 * (now.x0 + now.x1) if chosen is None else chosen.mjd
            half = 0.5 * max((now.x1 - now.x0) / 2.0**step, LEAST_DAYS)
            first, last = points[0].mjd, points[-1].mjd
            self._time = (middle - half, middle + half)
            if self._time[0] < first and self._time[1] > last:
                self._time = None
        self.draw()

    def action_host_light(self) -> None:
        """Choose how the host's light is taken off."""
        view = self.fadeline.view
        if view is None:
            return
        from tui.screens.choice import ChoiceScreen

        name = view.target.name
        now = {point.host_method for point in view.night_points if point.state in ("kept", "limit")}

        def chosen(value: str | None) -> None:
            if value is not None:
                self.fadeline.decide(f"host:{name}", "method", value, f"Host light of {name}: {HOST_WAYS[value]}")

        shown = [(value, f"{words}{'  (now)' if value in now else ''}") for value, words in HOST_WAYS.items()]
        self.app.push_screen(ChoiceScreen("Host light", shown), chosen)

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
