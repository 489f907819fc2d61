"""Distance: the modulus with its error, how it came about, what it stands on and what speaks against it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual.app import ComposeResult
from textual.containers import Horizontal, VerticalScroll
from textual.widgets import Static

from tui.actions import screen_bindings
from tui.estimate_panel import budget_text, cautions_text, modulus_text, parameters_text
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.chart import Chart
from tui.widgets.raster import Marks

if TYPE_CHECKING:
    from collections.abc import Sequence

    from reduce.views import EstimateRow, Snapshot, TargetView

_NEWEST_CHANGES = 6


def history_marks(history: Sequence[EstimateRow]) -> list[Marks]:
    """Modulus against the number of the estimate; those that could not tell leave a gap."""
    told = [(i, row) for i, row in enumerate(history, 1) if row.mu is not None]
    if not told:
        return []
    return [
        Marks(
            label="",
            colour="#56b4e9",
            x=[float(i) for i, _ in told],
            y=[math.nan if row.mu is None else row.mu for _, row in told],
            err=[math.nan if row.mu_err is None else row.mu_err for _, row in told],
            markers="o" * len(told),
        )
    ]


def changes_text(history: Sequence[EstimateRow]) -> Text:
    """What moved the modulus lately, newest first."""
    if not history:
        return Text("")
    lines = [Text("What moved it", "bold")]
    numbered = list(enumerate(history, 1))
    for i, row in reversed(numbered[-_NEWEST_CHANGES:]):
        before = history[i - 2].mu if i >= 2 else None
        moved = f"{row.mu - before:+.3f}" if row.mu is not None and before is not None else "      "
        mu = "cannot tell" if row.mu is None else f"{row.mu:.3f}"
        lines.append(Text(f"{i:3d}  {mu:11} {moved}  {row.why}"))
    return Text("\n").join(lines)


class DistanceScreen(CampaignScreen):
    """What the light curve says now, and how sure it is."""

    MODE = "distance"
    BINDINGS: ClassVar = screen_bindings("distance")

    def body(self) -> ComposeResult:
        """Modulus on top; history beside budget, parameters and cautions."""
        yield Static("", id="modulus")
        with Horizontal(id="distance-body"):
            yield Chart("μ after each estimate", least_y=0.1, x_label="no.", id="history")
            with VerticalScroll(id="distance-side"):
                yield Static("", id="cautions")
                yield Static("", id="budget")
                yield Static("", id="parameters")
                yield Static("", id="changes")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the chosen target."""
        estimate, plain = view.estimate if view else None, self.fadeline.plain
        history = view.history if view else ()
        self.query_one("#modulus", Static).update(modulus_text(view))
        self.query_one("#history", Chart).show(history_marks(history), plain=plain, empty="No modulus yet.")
        width = self.query_one("#budget").content_size.width or 36
        self.query_one("#cautions", Static).update(cautions_text(estimate))
        self.query_one("#budget", Static).update(budget_text(estimate, width, plain))
        self.query_one("#parameters", Static).update(parameters_text(view))
        self.query_one("#changes", Static).update(changes_text(history))
