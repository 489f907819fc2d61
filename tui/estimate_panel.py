"""An estimate as blocks of styled text for the screens."""

from __future__ import annotations

from textwrap import wrap
from typing import TYPE_CHECKING

from rich.text import Text

from reduce.candles.distance import modulus_to_mpc, mpc_with_errors
from tui.band_look import band_colour
from tui.number_text import number, with_error

if TYPE_CHECKING:
    from reduce.records import Estimate, Pulsation
    from reduce.views import TargetView

BAR_WIDTH = 8
WIDTH_FOR_NOTES = 60
"""Columns from which the budget has room for more than names and numbers."""


def modulus_text(view: TargetView | None) -> Text:
    """The one line of the Distance screen, the verdict and the scale it stands on."""
    estimate = view.estimate if view else None
    if estimate is None:
        return Text("No estimate yet.", "bold")
    text = Text()
    if estimate.mu is None:
        text.append("Cannot tell yet", "bold")
    else:
        text.append(f"μ = {with_error(estimate.mu, estimate.mu_err, 3)} mag", "bold reverse")
        text.append(f"   {distance_mpc(estimate.mu, estimate.mu_err)}")
    text.append(f"\n{estimate.verdict}")
    if estimate.scale:
        text.append(f"\nStands on: {estimate.scale}", "dim")
    return text


def distance_mpc(mu: float, mu_err: float | None) -> str:
    """Luminosity distance of a modulus in words, with the two errors of its 1 σ interval."""
    if mu_err is None:
        return f"{number(modulus_to_mpc(mu), 1)} Mpc"
    mpc, up, down = mpc_with_errors(mu, mu_err)
    digits = 1 if mpc < 1000 else 0
    return f"{number(mpc, digits)} +{number(up, digits)} −{number(down, digits)} Mpc"


def parameters_text(view: TargetView | None) -> Text:
    """Fitted parameters, one a line."""
    estimate = view.estimate if view else None
    if view is None or estimate is None:
        return Text("")
    lines = [Text("Parameters", "bold")]
    if view.target.kind == "type_ia":
        lines += [
            Text(f"B maximum  MJD {with_error(estimate.t_max, estimate.t_max_err, 2)}"),
            Text(f"Δm15       {with_error(estimate.dm15, estimate.dm15_err, 3)}"),
            Text(f"host E(B−V) {with_error(estimate.e_host, estimate.e_host_err, 3)}"),
        ]
    if estimate.pulsation is not None:
        lines += _pulsation_lines(estimate.pulsation)
    lines.append(Text(f"χ²         {number(estimate.chi2, 1)} of {estimate.n} points"))
    for band, mag in estimate.peak_mag.items():
        lines.append(Text.assemble((f"{band} ", f"bold {band_colour(band)}"), f"at maximum  {number(mag, 3)}"))
    type_word = view.target.spectroscopic_type
    if view.target.kind == "type_ia":
        lines.append(Text(f"Type {type_word} by spectrum" if type_word else "Type assumed, no spectrum"))
    return Text("\n").join(lines)


def _pulsation_lines(star: Pulsation) -> list[Text]:
    """Period and its aliases, means and moduli, one a line."""
    lines = [
        Text(f"Period     {with_error(star.period_d, star.period_err_d, 5)} d"),
        Text(f"Mode       {star.mode}"),
        Text(f"Phase      {100 * star.coverage:.0f} % covered"),
    ]
    lines += [
        Text(f"  {100 * alias.probability:5.1f} %  {alias.period_d:.6g} d {alias.note}", "" if place == 0 else "dim")
        for place, alias in enumerate(star.aliases)
    ]
    for mean in star.means:
        lines.append(
            Text.assemble(
                (f"<{mean.band}> ", f"bold {band_colour(mean.band)}"),
                f"{with_error(mean.mag, mean.err, 3)}  amplitude {number(mean.amplitude_mag, 2)}",
                ("" if mean.covered else "  not covered", "#e69f00"),
            )
        )
    lines += [Text(f"μ {m.band:2} {with_error(m.mag, m.err, 3)}  {m.relation}") for m in star.moduli]
    if star.provenance:
        lines.append(Text(star.provenance, "dim"))
    return lines


def budget_text(estimate: Estimate | None, width: int, plain: bool) -> Text:
    """The error budget: each component with a bar of its share of the variance."""
    if estimate is None or not estimate.budget:
        return Text("")
    total = sum(line.mag**2 for line in estimate.budget)
    lines = [Text("Error budget", "bold"), Text("  mag  share of the variance", "dim")]
    for line in sorted(estimate.budget, key=lambda line: -line.mag):
        share = line.mag**2 / total if total > 0 else 0.0
        bar = (("#" if plain else "█") * round(share * BAR_WIDTH)).ljust(BAR_WIDTH)
        figures = f"{line.mag:5.3f}  {bar} {100.0 * share:3.0f} %  "
        words = wrap(line.component, max(width - len(figures), 12))
        notes = wrap(line.note, width - len(figures)) if width >= WIDTH_FOR_NOTES else []
        lines.append(Text.assemble(figures[:7], (bar, "#56b4e9"), figures[7 + BAR_WIDTH :], words[0] if words else ""))
        lines += [Text(" " * len(figures) + rest) for rest in words[1:]]
        lines += [Text(" " * len(figures) + rest, "dim") for rest in notes]
    return Text("\n").join(lines)


def cautions_text(estimate: Estimate | None) -> Text:
    """Every warning with its evidence."""
    if estimate is None:
        return Text("")
    if not estimate.warnings:
        return Text("No caution.")
    lines = [Text("Cautions", "bold")]
    for caution in estimate.warnings:
        lines.append(Text.assemble((f"! {caution.name.replace('_', ' ')}: ", "bold #e69f00"), caution.evidence))
    return Text("\n").join(lines)
