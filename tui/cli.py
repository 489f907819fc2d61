"""The ``fadeline`` command: data on stdout, progress on stderr, exit 0 done / 1 some files unreadable / 2 usage."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Literal

import click

from tui.combine_command import combine
from tui.command_line import EXIT_UNREADABLE, FILE, FOLDER, OneSentence, open_campaign, plainly, print_json, progress
from tui.import_command import import_points
from tui.plan_command import advise, plan
from tui.sequence_command import sequence, standards
from tui.target_command import target as target_command


def _version(context: click.Context, _parameter: click.Parameter, wanted: bool) -> None:
    if wanted and not context.resilient_parsing:
        from reduce.version import version

        click.echo(f"fadeline {version()}")
        context.exit()


@click.group(invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]})
@click.option("--version", is_flag=True, is_eager=True, expose_value=False, callback=_version,
              help="Show the version and leave.")  # fmt: skip
@click.pass_context
def main(context: click.Context) -> None:
    """Observing log and photometry for standard candles, in the terminal.

    Without a command the app opens on the campaign in the current folder.
    """
    if context.invoked_subcommand is None:
        context.invoke(open_app, folder=Path())


# ---- campaigns -------------------------------------------------------------------------------------------


def _numbers(text: str, names: str, option: str) -> list[float]:
    parts = [part.strip() for part in text.split(",")]
    wanted = names.split(",")
    try:
        values = [float(part) for part in parts]
    except ValueError:
        values = []
    if len(values) != len(wanted):
        raise click.BadParameter(f"{text!r} is not {names} in decimal degrees or metres.", param_hint=option)
    return values


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--frames", required=True, type=FOLDER, help="Folder where frames lie or land; searched recursively.")
@click.option("--sequence", required=True, type=FILE, help="Comparison stars: CSV with id,ra,dec,B,B_err,V,…")
@click.option("--target", "targets", required=True, multiple=True, metavar='"NAME,RA,DEC,KIND[,Z]"',
              help="What is followed; KIND is type_ia, cepheid, rr_lyrae or other. Repeatable.")  # fmt: skip
@click.option("--ebv-mw", metavar="E[,SCALE]",
              help="Milky Way E(B−V) of the first target; SCALE is SF11 (default) or SFD.")  # fmt: skip
@click.option("--spectrum", metavar="TYPE", help="Spectroscopic type of the first target, when a spectrum was taken.")
@click.option("--host", metavar="RA,DEC", help="Centre of the host galaxy of the first target, degrees.")
@click.option("--reference", type=FOLDER, help="Folder of frames without the supernova; never used as science.")
@click.option("--scale", type=click.FloatRange(0.01, 60), metavar="ARCSEC_PER_PIXEL", help="Pixel scale, unbinned.")
@click.option("--site", metavar="LAT,LON,HEIGHT", help="Degrees north, degrees east, metres.")
@plainly
def new(
    folder: Path,
    frames: Path,
    sequence: Path,
    targets: tuple[str, ...],
    ebv_mw: str | None,
    spectrum: str | None,
    host: str | None,
    reference: Path | None,
    scale: float | None,
    site: str | None,
) -> None:
    """Start a campaign in DIR for the frames that lie, or will land, in a folder."""
    from dataclasses import replace

    from reduce.campaign.door import Campaign
    from reduce.campaign.targets import parse_target
    from reduce.plain_text import clean_text

    parsed = [
        parse_target(text, ebv_mw if first else None, host if first else None, reference if first else None)
        for first, text in zip([True] + [False] * len(targets), targets, strict=False)
    ]
    parsed[0] = replace(parsed[0], spectroscopic_type=clean_text(spectrum, 20) if spectrum else None)
    place = _numbers(site, "LAT,LON,HEIGHT", "--site") if site else None
    campaign = Campaign.create(folder, frames, sequence, parsed, scale_arcsec=scale, site=place)
    click.echo(f"Campaign in {folder}: {len(campaign.targets())} target(s), frames in {frames}.", err=True)
    click.echo(f"Next: fadeline open {folder}   (or, without the app: fadeline reduce {folder})", err=True)
    for note in campaign.sequence_notes():
        click.echo(note, err=True)


@main.command("open")
@click.argument("folder", metavar="[DIR]", type=FOLDER, default=Path())
@plainly
def open_app(folder: Path) -> None:
    """Open the app on the campaign in DIR and reduce frames as they land."""
    from tui.live import run_app

    run_app(folder)


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--follow", is_flag=True, help="Stay and reduce frames as they land; ctrl+c ends it.")
@click.option("--workers", type=click.IntRange(1, 64), help="Processes; default: the number of cores.")
@click.option("--json", "as_json", is_flag=True, help="One JSON line a frame, then a summary line.")
@click.option("--until-input-ends", is_flag=True, hidden=True, help="Stop when standard input closes.")
@plainly
def reduce(folder: Path, follow: bool, workers: int | None, as_json: bool, until_input_ends: bool) -> None:
    """Reduce what has landed: calibrate, match, measure, solve, estimate."""
    campaign = open_campaign(folder)
    unreadable = False
    stop = _stop_wish(until_input_ends)
    for report in campaign.reduce(follow=follow, workers=workers, progress=progress, should_stop=stop):
        unreadable = report.summary["unreadable"] > 0
        for row in report.rows:
            if as_json:
                print_json(row)
            elif row["state"] != "kept":
                click.echo(f"{row['file']}: {row['state'] or row['outcome']}: {row['reason']}")
        if as_json:
            print_json(report.summary)
        else:
            click.echo(report.sentence)
    if unreadable:
        sys.exit(EXIT_UNREADABLE)


def _stop_wish(until_input_ends: bool) -> Callable[[], bool]:
    """True once somebody asked to stop: by ctrl+c, by hanging up, or by closing our standard input."""
    import signal
    import threading

    asked = threading.Event()

    def ask(number: int, _frame: object) -> None:
        asked.set()
        signal.signal(number, signal.SIG_DFL)  # asking twice ends it at once; nothing is lost either way

    for name in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(name, ask)
    if until_input_ends:

        def wait_for_end() -> None:
            sys.stdin.read()
            asked.set()

        threading.Thread(target=wait_for_end, daemon=True).start()
    return asked.is_set


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("target", required=False)
@click.option("--per-frame", is_flag=True, help="One point a frame instead of one a night and band.")
@click.option("--all-stars", is_flag=True, help="The comparison stars as well (per frame).")
@click.option("--json", "as_json", is_flag=True, help="A JSON array of points.")
@plainly
def curve(folder: Path, target: str | None, per_frame: bool, all_stars: bool, as_json: bool) -> None:
    """Print the calibrated light curve of TARGET."""
    from reduce.exchange.point_json import point_to_json

    campaign = open_campaign(folder)
    points = campaign.curve(campaign.target(target).name, per_frame=per_frame, all_stars=all_stars)
    if as_json:
        print_json([point_to_json(point) for point in points])
        return
    click.echo("night       band  MJD (UTC)      mag      err     err_night err_band state  frames")
    for p in points:
        mag = "   –   " if p.mag is None else f"{p.mag:7.3f}"
        errors = "  ".join("  –   " if e is None else f"{e:6.4f}" for e in (p.err, p.err_night, p.err_band))
        name = "" if p.file is None else f"  {p.file}"
        who = f"  {p.star}" if all_stars else ""
        click.echo(f"{p.night}  {p.band:4}  {p.mjd:12.5f}  {mag}  {errors}  {p.state:9} {p.n_frames}{name}{who}")


@main.command()
@click.argument("folder", metavar="[DIR]", type=FOLDER, required=False)
@click.argument("target", required=False)
@click.option(
    "--light-curve",
    type=FILE,
    help="Fit a CSV file instead: name,mjd,band,mag,err,z,ebv_mw[,kind,flux,flux_err,err_band,source,passbands].",
)
@click.option("--scale-h0", type=click.FloatRange(20, 200), metavar="H0", help="Scale of type Ia distances, km/s/Mpc.")
@click.option("--scale-mb", type=click.FloatRange(-21, -17), metavar="M_B",
              help="The same by a calibrated M_B at maximum (Δm15 = 1.1, no host dust).")  # fmt: skip
@click.option("--without-prior", multiple=True, metavar="NAME",
              help="Do without what is assumed: dust, dm15, grey or offsets. Repeatable.")  # fmt: skip
@click.option("--samples", type=click.IntRange(1, 1_000_000), metavar="N",
              help="Print N draws from the posterior as CSV.")  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="One JSON object a target, on a line.")
@plainly
def distance(
    folder: Path | None,
    target: str | None,
    light_curve: Path | None,
    scale_h0: float | None,
    scale_mb: float | None,
    without_prior: tuple[str, ...],
    samples: int | None,
    as_json: bool,
) -> None:
    """Print the distance modulus, how sure it is and why."""
    from reduce.campaign.estimates import assumptions_of, estimate_file, sample_rows
    from reduce.candles.assumptions import PRIORS
    from reduce.exchange.light_curve_file import read_light_curves
    from reduce.exchange.point_json import estimate_to_json

    for number, option in ((scale_h0, "--scale-h0"), (scale_mb, "--scale-mb")):
        if number is not None and number != number:
            raise OneSentence(f"{option}: nan is not a number.")
    if scale_h0 is not None and scale_mb is not None:
        raise click.UsageError("Give either --scale-h0 or --scale-mb, not both.")
    if unknown := set(without_prior) - set(PRIORS):
        raise click.BadParameter(f"{min(unknown)!r} is none of {', '.join(PRIORS)}.", param_hint="--without-prior")
    if light_curve is not None:
        if folder is not None:
            raise click.UsageError("Give either a campaign folder or --light-curve, not both.")
        assumptions = assumptions_of(None, scale_h0, scale_mb, without_prior)
        if samples:
            _print_samples(sample_rows(read_light_curves(light_curve), samples, assumptions))
            return
        estimates = estimate_file(light_curve, assumptions)
    else:
        campaign = open_campaign(folder or Path())
        assumptions = assumptions_of(campaign.settings, scale_h0, scale_mb, without_prior)
        names = [campaign.target(target).name] if target else [t.name for t in campaign.targets()]
        if samples:
            _print_samples(sample_rows([campaign.light_curve(name) for name in names], samples, assumptions))
            return
        estimates = (campaign.estimate(name, assumptions=assumptions) for name in names)
    for estimate in estimates:
        if as_json:
            print_json(estimate_to_json(estimate))
        else:
            from tui.estimate_text import estimate_lines

            click.echo("\n".join(estimate_lines(estimate)))


def _print_samples(rows: Iterable[tuple[str, tuple[float, ...] | None]]) -> None:
    """CSV of draws; a target that has no distance yet is named on stderr."""
    click.echo("name,mu,e_host,t_max,dm15")
    for name, row in rows:
        if row is None:
            click.echo(f"{name}: cannot tell yet, so there is nothing to draw from.", err=True)
        else:
            quoted = '"' + name.replace('"', '""') + '"' if set(name) & set(',"') else name
            click.echo(f"{quoted},{row[0]:.5f},{row[1]:.5f},{row[2]:.5f},{row[3]:.5f}")


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("words", nargs=-1, required=True, metavar="TEXT")
@click.option("--target", "target_name", help="Target the note belongs to; default: the first.")
@plainly
def note(folder: Path, words: tuple[str, ...], target_name: str | None) -> None:
    """Write a note into the observing log."""
    campaign = open_campaign(folder)
    row = campaign.note(campaign.target(target_name).name, " ".join(words))
    click.echo(f"{row.at}  {row.target}  {row.body}")


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.option("--search", help="Only lines that hold these words.")
@click.option("--target", "target_name", help="Only this target.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line.")
@plainly
def log(folder: Path, search: str | None, target_name: str | None, as_json: bool) -> None:
    """Print the observing log: notes, decisions and events, oldest first."""
    from dataclasses import asdict

    campaign = open_campaign(folder)
    name = campaign.target(target_name).name if target_name else None
    for row in campaign.log(search=search, target=name):
        if as_json:
            print_json(asdict(row))
        else:
            click.echo(f"{row.at}  {row.kind:8}  {row.target:12}  {row.who:10}  {row.body}")


@main.command()
@click.argument("folder", metavar="DIR", type=FOLDER)
@click.argument("target", required=False)
@click.option(
    "--format",
    "style",
    type=click.Choice(["ecsv", "csv"]),
    help="Default: from the file's ending, else ecsv.",
)
@click.option("--output", "-o", type=FILE, help="File to write; - or nothing: standard output.")
@click.option("--per-frame", is_flag=True, help="One row a frame instead of one a night and band.")
@plainly
def export(
    folder: Path, target: str | None, style: Literal["ecsv", "csv"] | None, output: Path | None, per_frame: bool
) -> None:
    """Write the calibrated light curve as an ECSV table or CSV."""
    campaign = open_campaign(folder)
    if output == Path("-"):
        output = None
    by_name: Literal["ecsv", "csv"] = "csv" if output is not None and output.suffix.lower() == ".csv" else "ecsv"
    chosen = style or by_name
    n = campaign.export(campaign.target(target).name, output, chosen, per_frame=per_frame)
    if output is not None:
        click.echo(f"{n} points written to {output}.", err=True)


@main.command()
@click.argument("files", nargs=-1, required=True, type=FILE, metavar="FILE...")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a file, on a line.")
@click.option("--campaign", "folder", type=FOLDER, help="Read camera settings of this campaign.")
@plainly
def inspect(files: tuple[Path, ...], as_json: bool, folder: Path | None) -> None:
    """Say what each file is and what was understood of it."""
    from reduce.frames.inspection import inspect_file
    from reduce.settings import Settings, read_settings
    from tui.inspect_text import inspect_lines

    settings = read_settings(folder / "observatory.toml") if folder else Settings()
    unusable = 0
    for path in files:
        found = inspect_file(path, settings, time.time())
        unusable += not found["usable"]
        if as_json:
            print_json(found)
        else:
            click.echo("\n".join(inspect_lines(found)))
    if unusable:
        sys.exit(EXIT_UNREADABLE)


@main.command()
@click.argument("folder", metavar="[DIR]", type=FOLDER, required=False)
@plainly
def doctor(folder: Path | None) -> None:
    """Check the installation, the terminal and, with DIR, a campaign; say what to mend."""
    from tui.doctor import examine

    findings = examine(folder)
    for finding in findings:
        click.echo(f"{'ok  ' if finding.good else 'mend'}  {finding.sentence}")
    if not all(finding.good for finding in findings):
        sys.exit(EXIT_UNREADABLE)


@main.command()
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Another seed, another sky.")
@click.option("--scatter", is_flag=True, help="Draw the intrinsic scatter of real supernovae.")
@click.option("--headless", is_flag=True, help="Reduce and print; do not open the app.")
@click.option("--json", "as_json", is_flag=True, help="With --headless: one JSON object.")
@click.option("--folder", type=FOLDER, help="Where to put it; default: ./fadeline-demo-SEED.")
@click.option("--workers", type=click.IntRange(1, 64), help="Processes; default: the number of cores.")
@plainly
def demo(seed: int, scatter: bool, headless: bool, as_json: bool, folder: Path | None, workers: int | None) -> None:
    """Render an invented campaign with known truth and reduce it."""
    from tui.demo import prepare_demo, report_demo

    place = folder or Path(f"fadeline-demo-{seed}{'-scatter' if scatter else ''}")
    campaign_folder = prepare_demo(place, seed, scatter, progress)
    if not headless:
        _watch_demo(place, campaign_folder)
        return
    result = report_demo(place, campaign_folder, workers, progress)
    if as_json:
        print_json(result)
        return
    for row in result["targets"]:
        click.echo(
            f"{row['name']}: mu = {row['mu']:.3f} ± {row['mu_err']:.3f} (true {row['mu_true']:.3f}), "
            f"{row['nights']} nights, frames kept {row['frames_kept']}, doubtful {row['frames_doubtful']}, "
            f"dropped {row['frames_dropped']}"
            if row["mu"] is not None
            else f"{row['name']}: no distance yet"
        )
    for band, row in result["photometry"].items():
        click.echo(
            f"{band}: offset {1000 * row['mean_offset']:+.1f} mmag, χ²/n {row['chi2_reduced']:.2f}, n {row['n']}"
        )
    click.echo(f"{result['seconds']:.0f} s; open it with: fadeline open {campaign_folder}")


def _watch_demo(place: Path, campaign_folder: Path) -> None:
    """Open the app while the demo's nights land one after the other."""
    import threading

    from tui.demo import deliver_nights
    from tui.live import run_app

    stop = threading.Event()
    threading.Thread(target=deliver_nights, args=(place, stop), daemon=True).start()
    try:
        run_app(campaign_folder)
    finally:
        stop.set()
    click.echo(f"The demo lies in {place}; open it again with: fadeline open {campaign_folder}")


main.add_command(target_command)
main.add_command(plan)
main.add_command(advise)
main.add_command(sequence)
main.add_command(import_points)
main.add_command(combine)
main.add_command(standards)

if __name__ == "__main__":
    main()
