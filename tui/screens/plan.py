"""Plan: the night's altitudes, what is due, and which exposures are worth their time."""

from __future__ import annotations

import time
from collections.abc import Sequence
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Container
from textual.widgets import DataTable, Static

from tui.actions import screen_bindings
from tui.band_look import band_colour
from tui.messages import trouble_sentence
from tui.number_text import exposure_text, number, ut
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.chart import Chart
from tui.widgets.raster import Line, Marks
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from reduce.views import Advice, Plan, Snapshot, TargetPlan, TargetView

LEAST_AGE_S = 60.0
"""A plan is made anew at most this often, however often the logbook changes."""
_LETTERS = "ABCDEFGHJKLNPQRSTUVWXYZ"
_TARGET_COLOURS = ("#56b4e9", "#009e73", "#e69f00", "#cc79a7", "#d55e00", "#0072b2")
_MOON_COLOUR = "#f0e442"
_TWILIGHT_COLOUR = "#888888"


def hours_of(plan: Plan) -> list[float]:
    """Hours UT, those before midnight negative."""
    midnight = round(sum(plan.mjd) / len(plan.mjd))
    return [(mjd - midnight) * 24.0 for mjd in plan.mjd]


def altitude_lines(plan: Plan, chosen: str) -> list[Line]:
    """A curve for each target, grey but for the chosen one, and the Moon's."""
    hours = hours_of(plan)
    lines = [Line(_MOON_COLOUR, hours, _above(plan.moon_altitude_deg))]
    for k, one in enumerate(plan.targets):
        colour = _TARGET_COLOURS[k % len(_TARGET_COLOURS)] if one.target.name == chosen else _TWILIGHT_COLOUR
        lines.append(Line(colour, hours, _above(one.night.altitude_deg)))
    return lines


def _above(altitudes: Sequence[float]) -> list[float]:
    return [altitude if altitude >= 0.0 else float("nan") for altitude in altitudes]


def altitude_marks(plan: Plan) -> list[Marks]:
    """Twilight along the bottom, the Moon's m, and each target's letter on every hour it can be observed."""
    hours = hours_of(plan)
    light = ["#" if sun > -6 else "=" if sun > -12 else "-" if sun > -18 else " " for sun in plan.sun_altitude_deg]
    lit = [k for k, sign in enumerate(light) if sign != " "]
    marks = [
        Marks("", _TWILIGHT_COLOUR, [hours[k] for k in lit], [0.0] * len(lit), None, "".join(light[k] for k in lit)),
    ]
    every_hour = [k for k in range(1, len(hours)) if int(hours[k] // 1) != int(hours[k - 1] // 1)]
    up = [k for k in every_hour if plan.moon_altitude_deg[k] > 0]
    marks.append(
        Marks(
            f"m Moon {plan.moon_illumination:.0%}", _MOON_COLOUR, [hours[k] for k in up],
            [plan.moon_altitude_deg[k] for k in up], None, "m" * len(up),
        )
    )  # fmt: skip
    for k, one in enumerate(plan.targets):
        window = one.night.window
        rows = [i for i in every_hour if window is not None and window[0] <= plan.mjd[i] <= window[1]]
        letter = _LETTERS[k % len(_LETTERS)]
        marks.append(
            Marks(
                f"{letter} {one.target.name}", _TARGET_COLOURS[k % len(_TARGET_COLOURS)], [hours[i] for i in rows],
                [one.night.altitude_deg[i] for i in rows], None, letter * len(rows),
            )
        )  # fmt: skip
    return marks


def target_cells(plan: TargetPlan) -> Cells:
    """One target's night."""
    night = plan.night
    window = "–" if night.window is None else f"{ut(night.window[0])}–{ut(night.window[1])}"
    return (
        cell(plan.target.name),
        cell(window),
        cell(number(night.least_airmass, 2), right=True),
        cell(f"{night.moon_separation_deg:.0f}", right=True),
        cell(night.due if night.window is not None else night.why_not, "#e69f00" if night.is_due else ""),
    )


def advice_cells(advice: Advice, tonight: bool) -> Cells:
    """One exposure and why."""
    look = "" if tonight else "dim"
    when = ut(advice.mjd) if tonight else f"{advice.night[5:]} {ut(advice.mjd)}"
    return (
        cell(when, look),
        cell(advice.band, band_colour(advice.band)),
        cell(exposure_text(advice.n, advice.exposure_s), look, right=True),
        cell(number(advice.minutes, 1), look, right=True),
        cell(number(advice.mu_err, 3), look, right=True),
        cell(advice.reason, look),
    )


class PlanScreen(CampaignScreen):
    """What to do with the night."""

    MODE = "plan"
    BINDINGS: ClassVar = screen_bindings("plan")

    def __init__(self) -> None:
        super().__init__()
        self._plan: Plan | None = None
        self._made_for = -1
        self._made_at = 0.0
        self._words = "Planning the night."
        self._hidden: tuple[str, ...] = ()
        """Cautions that were read and hidden; new ones are shown."""

    def body(self) -> ComposeResult:
        """Cautions, altitudes, targets, advice."""
        yield Static("", id="plan-safety")
        with Container(id="plan-body"):
            yield Chart("altitude", x_label="UT", x_wraps_at=24.0, id="altitudes")
            with Container(id="plan-tables"):
                yield RowTable("target", "up (UT)", "X", "Moon°", "due", id="plan-targets")
                yield Static("", id="plan-sentence")
                yield RowTable("when", "b", "exposure", "min", "μ ±", "why", id="advice")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the plan there is, and ask for a new one when the logbook has moved."""
        old = time.monotonic() - self._made_at > LEAST_AGE_S
        if self._made_for < 0 or (snapshot.stamp != self._made_for and old):
            self._made_for, self._made_at = snapshot.stamp, time.monotonic()
            self.run_worker(self._make(), group="plan", exclusive=True, exit_on_error=False)
        self._draw_plan()

    async def _make(self) -> None:
        try:
            self._plan = await self.fadeline.desk.plan()
            self._words = ""
        except Exception as error:  # a missing site is a sentence in the plan's place
            self._words = trouble_sentence(error)
        if self.is_mounted:
            self._draw_plan()

    def _draw_plan(self) -> None:
        plan, chart = self._plan, self.query_one("#altitudes", Chart)
        safety, sentence = self.query_one("#plan-safety", Static), self.query_one("#plan-sentence", Static)
        if plan is None:
            safety.display = False
            chart.show([], plain=self.fadeline.plain, empty=self._words)
            sentence.update(Text(""))
            return
        chosen = self.fadeline.target_name
        safety.display = plan.cautions != self._hidden
        safety.update(Text(f"Safety (esc hides): {' '.join(plan.cautions)}"))
        chart.show(
            altitude_marks(plan), altitude_lines(plan, chosen), plain=self.fadeline.plain,
            title=f"altitude, night of {plan.night}",
        )  # fmt: skip
        self.query_one("#plan-targets", RowTable).show([(p.target.name, target_cells(p)) for p in plan.targets])
        mine = next((p for p in plan.targets if p.target.name == chosen), None)
        words = Text(self._words)
        if mine is not None:
            words = Text.assemble((f"{chosen}: ", "bold"), " ".join((mine.sentence, *mine.warnings)))
        sentence.update(words)
        rows: list[tuple[str, Cells]] = []
        if mine is not None:
            rows = [(f"{k}", advice_cells(one, True)) for k, one in enumerate(mine.tonight)]
            rows += [(f"later {k}", advice_cells(one, False)) for k, one in enumerate(mine.later)]
        self.query_one("#advice", RowTable).show(rows)

    @on(DataTable.RowSelected, "#plan-targets")
    def choose_target(self, event: DataTable.RowSelected) -> None:
        """Enter on a target chooses it."""
        self.fadeline.target_name = event.row_key.value or ""
        self.fadeline.redraw_screen()

    def action_dismiss_safety(self) -> None:
        """Hide the cautions for this session."""
        if self._plan is not None:
            self._hidden = self._plan.cautions
        self.draw()
