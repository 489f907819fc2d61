"""``fadeline sequence`` and ``fadeline standards``: comparison stars and standard fields."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

from tui.command_line import FILE, FOLDER, open_campaign, plainly, print_json

if TYPE_CHECKING:
    from reduce.standard.sequence_check import BandCheck, SequenceCheck
    from reduce.standard.transformation import Transformation


def _number(value: float | None, places: int = 4) -> float | None:
    return None if value is None or not math.isfinite(value) else round(value, places)


def _text(value: float | None, style: str) -> str:
    width = int(style.lstrip("+").split(".")[0])
    return "–".rjust(width) if value is None or not math.isfinite(value) else format(value, style + "f")


def _range(pair: tuple[float, float] | None) -> str:
    return "–" if pair is None else f"{pair[0]:.2f} to {pair[1]:.2f}"


@click.group()
def sequence() -> None:
    """Check, replace or make the comparison sequence."""


@sequence.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--json", "as_json", is_flag=True, help="One JSON object.")
@plainly
def check(folder: Path, as_json: bool) -> None:
    """Say which comparison stars are sound, which are not and why, and which stars would be better."""
    from reduce.campaign.sequences import check_campaign_sequence

    found = check_campaign_sequence(open_campaign(folder))
    if as_json:
        print_json(_check_json(found))
        return
    click.echo("star              band  word        catalogue  residual     rms  frames  reason")
    for row in found.stars:
        click.echo(
            f"{row.star:16}  {row.band:4}  {row.word:10}  {_text(row.catalogue_mag, '9.3')}  "
            f"{_text(row.residual_mag, '+8.3')}  {_text(row.rms_mag, '6.3')}  {row.n_frames:6}  {row.reason}"
        )
    click.echo("\nband  used  set aside  entries scatter  shared error  colours of stars  of target")
    for band in found.bands:
        click.echo(
            f"{band.band:4}  {band.n_used:4}  {band.n_set_aside:9}  {_text(band.entry_scatter_mag, '15.4')}  "
            f"{_text(band.floor_mag, '12.4')}  {_range(band.star_colours):>16}  {_range(band.target_colours)}"
        )
    for band in found.bands:
        if band.sentence:
            click.echo(band.sentence)
    if found.proposed:
        click.echo("\nConstant stars of fitting colour that are not in the sequence yet (ra, dec, magnitudes, rms):")
    for star in found.proposed:
        mags = "  ".join(f"{band} {mag:.3f} ± {star.err[band]:.3f}" for band, mag in star.mag.items())
        click.echo(f"{star.ra_deg:11.6f} {star.dec_deg:+11.6f}  {mags}  {star.rms_mag:.3f}")


def _check_json(found: SequenceCheck) -> dict[str, Any]:
    return {
        "stars": [
            {
                "star": row.star, "band": row.band, "word": row.word, "reason": row.reason,
                "catalogue_mag": _number(row.catalogue_mag), "residual_mag": _number(row.residual_mag),
                "rms_mag": _number(row.rms_mag), "frames": row.n_frames, "colour": _number(row.colour),
            }
            for row in found.stars
        ],
        "bands": [_band_json(band) for band in found.bands],
        "proposed": [
            {
                "ra": round(star.ra_deg, 7), "dec": round(star.dec_deg, 7), "rms_mag": _number(star.rms_mag),
                "frames": star.n_frames, "mag": {band: _number(mag) for band, mag in star.mag.items()},
                "err": {band: _number(err) for band, err in star.err.items()},
            }
            for star in found.proposed
        ],
    }  # fmt: skip


def _band_json(band: BandCheck) -> dict[str, Any]:
    return {
        "camera": band.camera, "band": band.band, "used": band.n_used, "set_aside": band.n_set_aside,
        "entry_scatter_mag": _number(band.entry_scatter_mag), "floor_mag": _number(band.floor_mag),
        "star_colours": band.star_colours and [_number(value) for value in band.star_colours],
        "target_colours": band.target_colours and [_number(value) for value in band.target_colours],
        "sentence": band.sentence,
    }  # fmt: skip


@sequence.command("import")
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("file", metavar="FILE", type=FILE)
@plainly
def import_(folder: Path, file: Path) -> None:
    """Put the comparison stars of FILE in force; the old ones stay in the logbook."""
    from reduce.campaign.sequences import import_sequence

    new, again = import_sequence(open_campaign(folder), file)
    follows = (
        "Run fadeline reduce, or open the app: frames are measured again." if again else "Nothing is measured again."
    )
    click.echo(f"Comparison sequence {new.name} of {len(new)} stars is in force. {follows}", err=True)


@sequence.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--output", "-o", required=True, type=FILE, help="File to write, in the form that import reads.")
@click.option("--by", type=click.Choice(["standards", "sequence"]), default="standards", show_default=True,
              help="What the nights are calibrated by.")  # fmt: skip
@click.option("--night", "nights", multiple=True, metavar="DATE", help="Evening, e.g. 2025-02-12; repeatable.")
@plainly
def make(folder: Path, output: Path, by: Literal["standards", "sequence"], nights: tuple[str, ...]) -> None:
    """Write a sequence of the stars that were measured on clear nights."""
    from reduce.campaign.sequences import make_sequence

    made, used = make_sequence(open_campaign(folder), output, by, frozenset(nights))
    click.echo(f"{len(made)} stars of {', '.join(used)} written to {output}.", err=True)
    click.echo(f"Next: fadeline sequence import {folder} {output}", err=True)


@click.command()
@click.argument("folder", metavar="[DIR]", type=FOLDER, required=False)
@click.option("--table", is_flag=True, help="Print the standard stars that are known, as CSV.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a camera, band and season.")
@plainly
def standards(folder: Path | None, table: bool, as_json: bool) -> None:
    """Print what nights of standard stars give: zero points, extinction, colour terms, drift."""
    if table:
        from reduce.field.sequence import sequence_lines
        from reduce.field.standards import read_standards

        click.echo("\n".join(sequence_lines(read_standards(folder or Path()))))
        return
    campaign = open_campaign(folder or Path())
    found = campaign.calibrated().transformations
    if as_json:
        for solved in found:
            print_json(_transformation_json(solved))
        return
    if not found and campaign.calibrated().of_standards:
        click.echo(
            "Frames of standards are there, but none is usable: they need a [site] in observatory.toml for their "
            f"airmass, a recognised field and no cloud (fadeline reduce {folder or '.'} says what became of them).",
            err=True,
        )
    elif not found:
        click.echo(
            "No frame shows a field of standards; put such frames where the others land (fadeline standards --table "
            "lists the stars, standards.csv in the campaign's folder adds your own).",
            err=True,
        )
    for solved in found:
        click.echo("\n".join(_transformation_lines(solved)))


def _transformation_lines(solved: Transformation) -> list[str]:
    first, last = solved.nights[0].night, solved.nights[-1].night
    term = f"{solved.term:+.4f} ± {solved.term_err:.4f}" if solved.term_fitted else "not fitted (colours too alike)"
    lines = [
        f"{solved.camera}, {solved.band}, {first} to {last}: colour term {term}, "
        f"second order {solved.second_order:+.3f}, {solved.n_stars} stars, rms {solved.rms_mag:.4f} mag",
        "  night       zero point   ±        extinction  ±        airmass        frames  rms",
    ]
    for night in solved.nights:
        low, high = night.airmass_range
        lines.append(
            f"  {night.night}  {night.zp_mag:10.4f}   {night.zp_err_mag:.4f}   {night.first_order:10.4f}  "
            f"{night.first_order_err:.4f}   {low:.2f} to {high:.2f}   {night.n_frames:6}  {night.rms_mag:.4f}"
            + ("" if night.first_order_is_own else "  (the season's extinction)")
        )
    if math.isfinite(solved.drift_mag_per_30_d):
        lines.append(f"  drift {solved.drift_mag_per_30_d:+.4f} ± {solved.drift_err_mag_per_30_d:.4f} mag in 30 days")
    lines += [f"  {star} does not take part: {why}" for star, why in solved.set_aside.items()]
    if solved.frames_set_aside:
        lines.append(f"  {len(solved.frames_set_aside)} frames do not take part (cloud)")
    return lines


def _transformation_json(solved: Transformation) -> dict[str, Any]:
    return {
        "camera": solved.camera, "band": solved.band, "first_night": solved.nights[0].night,
        "last_night": solved.nights[-1].night, "colour_term": _number(solved.term) if solved.term_fitted else None,
        "colour_term_err": _number(solved.term_err), "second_order": _number(solved.second_order),
        "stars": solved.n_stars, "measurements": solved.n_measurements, "rms_mag": _number(solved.rms_mag),
        "drift_mag_per_30_d": _number(solved.drift_mag_per_30_d),
        "drift_err_mag_per_30_d": _number(solved.drift_err_mag_per_30_d),
        "nights": [
            {
                "night": night.night, "zp_mag": _number(night.zp_mag), "zp_err_mag": _number(night.zp_err_mag),
                "extinction": _number(night.first_order), "extinction_err": _number(night.first_order_err),
                "extinction_is_own": night.first_order_is_own, "frames": night.n_frames,
                "airmass": [_number(value) for value in night.airmass_range], "rms_mag": _number(night.rms_mag),
            }
            for night in solved.nights
        ],
        "set_aside": dict(solved.set_aside),
        "frames_set_aside": len(solved.frames_set_aside),
    }  # fmt: skip
