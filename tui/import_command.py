"""``fadeline import``: points of other observatories beside those of our own frames."""

from __future__ import annotations

from pathlib import Path

import click

from tui.command_line import FILE, FOLDER, open_campaign, plainly


@click.command("import")
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("file", metavar="FILE", type=FILE)
@click.option("--target", "target_name", help="Target the points belong to; default: the first.")
@click.option("--source", default="", metavar="NAME", help="Who measured them, where the file has no column source.")
@plainly
def import_points(folder: Path, file: Path, target_name: str | None, source: str) -> None:
    """Take in points that others measured.

    The CSV has the columns name,mjd,band,mag,err,z,ebv_mw[,flux,flux_err,err_band,source,passbands]. They are shown and
    fitted beside own points, each source with zero points of its own. The same point is kept once.
    """
    campaign = open_campaign(folder)
    target = campaign.target(target_name).name
    new = campaign.import_points(target, file, source)
    click.echo(f"{new} new points of {target}." if new else f"No new points of {target}: all were here already.")
