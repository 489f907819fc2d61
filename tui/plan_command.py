"""``fadeline plan`` and ``fadeline advise``: the night ahead, and what is worth its time."""

from __future__ import annotations

import math
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tui.clock import now_mjd
from tui.command_line import FOLDER, OneSentence, open_campaign, plainly, print_json
from tui.number_text import exposure_text, number, ut

if TYPE_CHECKING:
    from reduce.views import Advice, Plan, TargetPlan


def _moment(night: str | None, longitude_deg: float) -> float:
    """Now, or the noon before the night of an ISO date."""
    from datetime import date

    if night is None:
        return now_mjd()
    try:
        evening = date.fromisoformat(night)
        if not 1900 <= evening.year <= 2200:
            raise ValueError(night)
        ordinal = evening.toordinal()
    except ValueError as error:
        raise OneSentence("--night wants the date of the evening, such as 2025-03-06.") from error
    east = (longitude_deg + 180.0) % 360.0 - 180.0
    return ordinal - date(1858, 11, 17).toordinal() + 0.5 - east / 360.0 + 0.01


def _plan(folder: Path, night: str | None) -> Plan:
    campaign = open_campaign(folder)
    site = campaign.settings.site
    return campaign.plan(_moment(night, site.longitude_deg if site is not None else 0.0))


def without_nan(value: Any) -> Any:
    """JSON knows no NaN: null."""
    if isinstance(value, dict):
        return {key: without_nan(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [without_nan(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _advice_line(advice: Advice) -> str:
    return (
        f"  {advice.night} {ut(advice.mjd)}  {advice.band} {exposure_text(advice.n, advice.exposure_s):>11}  "
        f"S/N {number(advice.snr, 0):>4}  X {advice.airmass:.2f}  {advice.minutes:4.1f} min  "
        f"μ ± {number(advice.mu_err, 3)}  {advice.reason}"
    )


def _window(plan: TargetPlan) -> str:
    night = plan.night
    if night.window is None:
        return night.why_not
    start, end = night.window
    return (
        f"{ut(start)}–{ut(end)} UT, transit {ut(night.transit_mjd)}, airmass from {number(night.least_airmass, 2)}, "
        f"Moon at {night.moon_separation_deg:.0f}°"
    )


@click.command("plan")
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--night", metavar="DATE", help="Evening to plan for (ISO); default: tonight.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object.")
@plainly
def plan(folder: Path, night: str | None, as_json: bool) -> None:
    """Show the night ahead: darkness, Moon, when each target is up and whether it is due."""
    found = _plan(folder, night)
    if as_json:
        print_json(without_nan(asdict(found)))
        return
    click.echo(f"Night of {found.night}   Moon lit {found.moon_illumination:.0%}")
    for name, evening, morning in found.twilight:
        what = "Sun down" if name == "Sun" else f"{name} dark"
        click.echo(f"  {what:18} {ut(evening)} to {ut(morning)} UT")
    for one in found.targets:
        click.echo(f"{one.target.name}: {_window(one)}")
        click.echo(f"  {one.night.due}")
        click.echo(f"  {one.sentence}")
    for caution in found.cautions:
        click.echo(f"! {caution}")
    for note in found.notes:
        click.echo(note, err=True)


@click.command("advise")
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("name", required=False, metavar="[TARGET]")
@click.option("--night", metavar="DATE", help="Evening to advise on (ISO); default: tonight.")
@click.option("--all", "everything", is_flag=True, help="Also each possible exposure alone, most for its time first.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a target.")
@plainly
def advise(folder: Path, name: str | None, night: str | None, everything: bool, as_json: bool) -> None:
    """Say which exposures are worth their time: what each does to the error of the distance, and why."""
    found = _plan(folder, night)
    wanted = open_campaign(folder).target(name).name if name is not None else None
    for one in found.targets:
        if wanted not in (None, one.target.name):
            continue
        if as_json:
            keys = ("sentence", "tonight", "later", "candidates")
            print_json({"target": one.target.name, **{k: v for k, v in without_nan(asdict(one)).items() if k in keys}})
            continue
        click.echo(f"{one.target.name}: {one.sentence}")
        for warning in one.warnings:
            click.echo(f"  ! {warning}")
        for advice in one.tonight:
            click.echo(_advice_line(advice))
        if one.later:
            click.echo("Coming nights, if clear:")
            for advice in one.later:
                click.echo(_advice_line(advice))
        if everything and one.candidates:
            click.echo("Each alone:")
            for advice in one.candidates:
                click.echo(_advice_line(advice))
    for note in found.notes:
        click.echo(note, err=True)
