"""Tonight: the targets, what is due, the latest frames."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual import on
from textual.app import ComposeResult
from textual.containers import Container
from textual.widgets import DataTable, Static

from tui.actions import SCREENS, screen_bindings
from tui.after_slew_text import after_slew_text
from tui.band_look import band_colour, word_colour
from tui.number_text import number, ut, with_error
from tui.screens.campaign_screen import CampaignScreen
from tui.widgets.row_table import Cells, RowTable, cell

if TYPE_CHECKING:
    from reduce.views import FrameRow, Snapshot, TargetView

SAFETY = (
    "Safety: local rules and licensed practice prevail. Keep off the Sun. Nobody near the mount before "
    "remote motion. Alone? Tell someone. (esc hides)"
)
_ARRIVALS = 40


def due_text(snapshot: Snapshot, chosen: str) -> Text:
    """What the campaign remarks, and a sentence for each target but the chosen one, whose stands on top."""
    lines = [Text(note) for note in snapshot.notes]
    for view in snapshot.targets:
        if view.target.name == chosen:
            continue
        key = next((i for i, name in enumerate(SCREENS.values(), 1) if name == view.next_screen), None)
        where = f"  ({key} {view.next_screen})" if key else ""
        lines.append(Text.assemble((view.target.name, "bold"), f": {view.next_sentence}{where}"))
    if snapshot.can_undo:
        lines.append(Text(f"u takes back: {snapshot.can_undo}", "dim"))
    return Text("\n").join(lines)


class TonightScreen(CampaignScreen):
    """Where the evening starts."""

    MODE = "tonight"
    BINDINGS: ClassVar = screen_bindings("tonight")

    def body(self) -> ComposeResult:
        """Safety line, targets, arrivals, due list."""
        yield Static(Text(SAFETY), id="safety")
        with Container(id="tonight-body"):
            yield RowTable("target", "kind", "nights", "last night", "μ", "wants", id="targets")
            yield RowTable("latest frame", "UT", "band", "s", "FWHM″", "state", id="arrivals")
        yield Static("", id="after-slew")
        yield Static("", id="due")

    def show(self, snapshot: Snapshot, view: TargetView | None) -> None:
        """Draw the campaign."""
        self.query_one("#safety").display = self.fadeline.safety_shown
        self.query_one("#targets", RowTable).show([(v.target.name, _target_cells(v)) for v in snapshot.targets])
        lights = [row for row in snapshot.frames if row.outcome != "calibration"]
        latest = sorted(lights, key=lambda row: row.mjd or 0.0, reverse=True)[:_ARRIVALS]
        self.query_one("#arrivals", RowTable).show([(row.id, _arrival_cells(row)) for row in latest])
        line = self.query_one("#after-slew", Static)
        line.update(after_slew_text(snapshot.after_slew))
        line.display = snapshot.after_slew is not None
        self.query_one("#due", Static).update(due_text(snapshot, self.fadeline.target_name))

    @on(DataTable.RowSelected, "#targets")
    def choose_target(self, event: DataTable.RowSelected) -> None:
        """Enter on a target chooses it."""
        self.fadeline.target_name = event.row_key.value or ""
        self.fadeline.redraw_screen()

    def action_dismiss_safety(self) -> None:
        """Hide the safety line for this session."""
        self.fadeline.safety_shown = False
        self.draw()


def _target_cells(view: TargetView) -> Cells:
    nights = sorted({point.night for point in view.night_points if point.state == "kept"})
    estimate = view.estimate
    wants = next((step.name for step in view.steps if step.state == "wants you"), "")
    mu = "cannot tell yet" if estimate is None or estimate.mu is None else with_error(estimate.mu, estimate.mu_err, 2)
    kind = view.target.kind.replace("type_ia", "type Ia").replace("_", " ")
    return (
        cell(view.target.name),
        cell(kind),
        cell(len(nights), right=True),
        cell(nights[-1] if nights else "–"),
        cell(mu),
        cell(wants, word_colour("wants you")),
    )


def _arrival_cells(row: FrameRow) -> Cells:
    word = row.state or row.outcome
    return (
        cell(row.file),
        cell(ut(row.mjd)),
        cell(row.band or "–", band_colour(row.band)),
        cell(number(row.exposure_s, 0), right=True),
        cell(number(row.fwhm_arcsec, 1), right=True),
        cell(word + (", to be measured again" if row.provisional else ""), word_colour(row.state)),
    )
