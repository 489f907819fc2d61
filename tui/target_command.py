"""``fadeline target``: what is known of a target, and new facts about it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from tui.command_line import FOLDER, open_campaign, plainly, print_json

HOST_WAYS = ("auto", "bent annulus", "mirrored", "reference")


@click.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("name", required=False, metavar="[TARGET]")
@click.option("--position", metavar="RA,DEC", help="Better coordinates; frames are then measured again by themselves.")
@click.option("--z", metavar="Z", help="Heliocentric redshift.")
@click.option("--ebv-mw", metavar="E[,SCALE]", help="Milky Way E(B−V); SCALE is SF11 (default) or SFD.")
@click.option("--spectrum", metavar="TYPE", help="Spectroscopic type.")
@click.option("--host", metavar="RA,DEC", help="Centre of the host galaxy.")
@click.option("--reference", type=FOLDER, help="Folder of frames without the target.")
@click.option("--metallicity", metavar="DEX[,ERR]", help="[Fe/H] or [O/H] of a Cepheid or RR Lyrae star.")
@click.option("--relation", metavar="NAME", help="Calibration of the period–luminosity relation; '' for the default.")
@click.option("--host-light", type=click.Choice(HOST_WAYS), help="How the host's light is taken off.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object.")
@plainly
def target(folder: Path, name: str | None, as_json: bool, host_light: str | None, **facts: Any) -> None:
    """Show what is known of TARGET, or correct it; the light curve follows by itself."""
    from dataclasses import asdict

    from reduce.campaign.targets import corrected

    campaign = open_campaign(folder)
    found = campaign.target(name)
    given = {key: value for key, value in facts.items() if value is not None}
    if given:
        found = corrected(found, **given)
        campaign.correct_target(found)
    if host_light:
        campaign.decide(f"host:{found.name}", "method", host_light)
    fields = {**asdict(found), "host_arcsec": found.host_arcsec, "host_light": campaign.host_summary(found.name)}
    if as_json:
        print_json(fields)
        return
    for key, value in fields.items():
        shown = "; ".join(value) if isinstance(value, list) else value
        click.echo(f"{key:20} {'–' if shown in (None, '') else shown}")
    if given or host_light:
        click.echo("Written down; fadeline reduce, or the open app, brings the light curve up to date.", err=True)
