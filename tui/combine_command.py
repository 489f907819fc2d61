"""``fadeline combine``: one distance from several indicators of one galaxy."""

from __future__ import annotations

from pathlib import Path

import click

from tui.command_line import FILE, plainly, print_json


@click.command()
@click.argument("file", metavar="FILE", type=FILE)
@click.option("--json", "as_json", is_flag=True, help="One JSON object.")
@plainly
def combine(file: Path, as_json: bool) -> None:
    """Combine moduli of one galaxy: CSV name,mu,err and a column for each error that several of them share (mag).

    A shared column holds how far each modulus moves when that error is 1 σ; empty where it plays no part.
    """
    from dataclasses import asdict

    from reduce.candles.combine import Indicator, combined
    from reduce.candles.distance import mpc_with_errors
    from reduce.exchange.moduli_file import read_moduli

    indicators = [Indicator(*row) for row in read_moduli(file)]
    found = combined(indicators)
    mpc, up, down = mpc_with_errors(found.mu, found.err)
    if as_json:
        distance = {"distance_mpc": mpc, "distance_mpc_plus": up, "distance_mpc_minus": down}
        print_json({**asdict(found), **distance})
        return
    click.echo(f"μ = {found.mu:.3f} ± {found.err:.3f} mag, {mpc:.2f} +{up:.2f} −{down:.2f} Mpc")
    click.echo(f"  {found.err_own:.3f} mag of their own, {found.err_shared:.3f} mag shared by several")
    click.echo(f"  χ² {found.chi2:.1f} for {found.dof} degrees of freedom; scaled by it, ± {found.err_scaled:.3f}")
    for indicator, weight, pull in zip(indicators, found.weights, found.pulls, strict=True):
        click.echo(f"  {indicator.name:24} {indicator.mu:7.3f}   weight {100 * weight:4.0f} %   pull {pull:+.1f}")
    for sentence in found.notes:
        click.echo(f"  ! {sentence}")
