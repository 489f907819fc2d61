"""Photometry on bright hosts and bad nights against what was rendered: python tests/bright_hosts.py [--hosts N] …

Nights with a supernova 3-15 arcsec from the core of its host are rendered with GalSim (bright_host_frames.py), reduced
with the command as a user would, and the light curves are held against the truth. Four hosts take about ten minutes on
two cores. Prints one table; leaves with 1 when a bound of the last column is broken.

    --hosts N      full hosts: three nights of 16 frames in B V R I, with faults and wrong sequence entries (4)
    --small N      hosts without a reference on small frames of one band, for the honesty of the host's error (0)
    --ways A,B     of plain (host not told), host (its centre told), reference (frames without the supernova too)
    --keep FOLDER  frames stay there and serve the next run with the same seed and numbers; campaigns are made anew
    --seed S  --processes N  --quick (two hosts, one night, small frames)  --points FILE (all points as CSV)
"""

from __future__ import annotations

import csv
import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from argparse import ArgumentParser
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass, fields
from functools import partial
from pathlib import Path

import numpy as np
from bright_host_files import write_calibration, write_light
from bright_host_frames import FrameTruth, StarTruth, make_detector
from bright_host_scene import BANDS, SITE, Plan, Scene, draw_scene
from bright_host_table import table

COMMAND = [sys.executable, "-m", "tui.cli"]
WAYS = ("plain", "host", "reference")
NAME = "SN Invented"
FULL = Plan()
QUICK = Plan(nights=1, frames_per_band=3, bands=("B", "V"), size_px=512, references_per_band=4, faults_per_night=1)
SMALL = Plan(1, 4, ("V",), 512, references_per_band=0, faults_per_night=0, wrong_stars=0, colour_terms=False)


@dataclass(frozen=True)
class Frame:
    """The target on one frame in one way of reducing, with its truth."""

    way: str
    host: int
    host_kind: str
    host_arcsec: float
    file: str
    night: int
    band: str
    fault: str
    fwhm_arcsec: float
    host_mag_arcsec2: float
    true_mag: float
    limit_mag: float
    method: str
    state: str
    """of the point; ``missing`` where there is none."""
    mag: float
    err: float
    """Total: independent, of the night and of the band."""


@dataclass(frozen=True)
class Night:
    """The target's point of a night and band."""

    way: str
    host: int
    band: str
    method: str
    state: str
    true_mag: float
    mag: float
    err: float
    limit_mag: float
    """Of the mean of the kept frames."""


@dataclass(frozen=True)
class Star:
    """One comparison star on one frame (first way only)."""

    host: int
    star: str
    band: str
    fault: str
    state: str
    saturated: bool
    true_mag: float
    photon_mag: float
    """With the zero point's."""
    mag: float


@dataclass(frozen=True)
class Entry:
    """One entry of the comparison sequence in one band (first way only)."""

    host: int
    star: str
    band: str
    wrong_by: float
    sigma: float
    """Of its mean over the frames: catalogue and photons."""
    n_frames: int
    word: str


@dataclass(frozen=True)
class Results:
    frames: tuple[Frame, ...]
    nights: tuple[Night, ...]
    stars: tuple[Star, ...]
    entries: tuple[Entry, ...]
    seconds: dict[str, float]
    """Per light frame and way."""


def fadeline(*words: object) -> str:
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    command = [*COMMAND, *map(str, words)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, env=environment, cwd="/")
    if done.returncode or "Traceback" in done.stderr:
        raise RuntimeError(f"fadeline {' '.join(map(str, words))} left with {done.returncode}: {done.stderr[-2000:]}")
    return done.stdout


def write_sequence(path: Path, scene: Scene) -> None:
    stars = scene.stars
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream)
        writer.writerow(["id", "ra", "dec", *(c for band in BANDS for c in (band, f"{band}_err"))])
        for k, name in enumerate(stars.ids()):
            cells = [f"{d[band][k]:.4f}" for band in BANDS for d in (stars.catalogue_mag, stars.catalogue_err)]
            writer.writerow([name, f"{stars.ra_deg[k] % 360:.7f}", f"{stars.dec_deg[k]:.7f}", *cells])


def render_host(scene: Scene, calibration: Path, place: Path, seed: int) -> dict[str, FrameTruth]:
    """All files of one host, where an earlier run has not kept them; truth by file name."""
    if (place / "truth.json").exists():
        rows = json.loads((place / "truth.json").read_text(encoding="utf-8"))
        return {row["file"]: FrameTruth(**row | {"stars": tuple(StarTruth(**s) for s in row["stars"])}) for row in rows}
    detector = make_detector(scene.camera, seed)
    for path in sorted(calibration.iterdir()):
        (place / "frames").mkdir(parents=True, exist_ok=True)
        os.link(path, place / "frames" / path.name)
    truth = {}
    for shot in scene.shots:
        folder = place / ("reference" if shot.role == "reference" else f"frames/night{shot.night + 1}")
        found = write_light(folder, scene, shot, detector)
        if shot.role == "night":
            truth[shot.name] = found
    write_sequence(place / "sequence.csv", scene)
    (place / "truth.json").write_text(json.dumps([asdict(row) for row in truth.values()]), encoding="utf-8")
    return truth


def reduce_host(scene: Scene, place: Path, way: str) -> tuple[Path, float]:
    """A campaign as a user makes it; its folder and the seconds that reducing took."""
    folder = place / f"campaign-{way}"
    shutil.rmtree(folder, ignore_errors=True)
    words: list[object] = ["--frames", place / "frames", "--sequence", place / "sequence.csv"]
    words += ["--target", f"{NAME},{scene.target_ra_deg:.7f},{scene.target_dec_deg:.7f},type_ia"]
    words += ["--site", "{},{},{}".format(*SITE)]
    if way != "plain":
        words += ["--host", f"{scene.host.ra_deg:.7f},{scene.host.dec_deg:.7f}"]
    if way == "reference":
        words += ["--reference", place / "reference"]
    fadeline("new", folder, *words)
    with (folder / "observatory.toml").open("a", encoding="utf-8") as stream:
        stream.write(f"\n[telescope]\naperture_m = {scene.camera.aperture_m}\n")
        stream.write(f"\n[camera]\nsaturation_adu = {scene.camera.saturation_adu}\n")
    start = time.perf_counter()
    fadeline("reduce", folder, "--workers", 1)
    spent = time.perf_counter() - start
    log = folder / "fadeline.log"
    if log.exists() and (unforeseen := log.read_text(encoding="utf-8").count("Traceback")):
        print(f"{log} holds {unforeseen} tracebacks: what follows is not what was built.", file=sys.stderr, flush=True)
    return folder, spent


def total_err(point: dict) -> float:
    return float(np.sqrt(sum((point[k] or 0.0) ** 2 for k in ("err", "err_night", "err_band"))))


def ask_target(scene: Scene, way: str, folder: Path, truth: dict[str, FrameTruth]) -> tuple[list[Frame], list[Night]]:
    points = {p["file"]: p for p in json.loads(fadeline("curve", folder, "--per-frame", "--json"))}
    frames = []
    for name, true in truth.items():
        point = points.get(name)
        known = point is not None and point["mag"] is not None
        frames.append(Frame(
            way, scene.number, scene.host.kind, scene.host_distance_arcsec, name, true.night, true.band, true.fault,
            true.fwhm_arcsec, true.host_mag_arcsec2, true.mag, true.limit_mag,
            point["host_method"] if point else "", point["state"] if point else "missing",
            point["mag"] if known else np.nan, total_err(point) if known else np.nan,
        ))  # fmt: skip
    nights = []
    for p in json.loads(fadeline("curve", folder, "--json")):
        near = [t for t in truth.values() if t.band == p["band"] and abs(t.mjd - p["mjd"]) < 0.5]
        weight = sum(t.limit_mag**-2 for t in near if points.get(t.file, {}).get("state") == "kept")
        if p["mag"] is not None and weight:
            nights.append(Night(
                way, scene.number, p["band"], p["host_method"], p["state"], near[0].mag, p["mag"], total_err(p),
                weight**-0.5,
            ))  # fmt: skip
    return frames, nights


def ask_stars(scene: Scene, folder: Path, truth: dict[str, FrameTruth]) -> tuple[list[Star], list[Entry]]:
    from reduce.campaign.door import Campaign

    stars = []
    known: dict[tuple[str, str], StarTruth] = {(n, s.id): s for n, t in truth.items() for s in t.stars}
    for p in json.loads(fadeline("curve", folder, "--all-stars", "--per-frame", "--json")):
        true = known.get((p["file"], p["star"]))
        if true is not None and p["mag"] is not None:
            frame = truth[p["file"]]
            photon = float(np.hypot(true.limit_mag, frame.zero_point_mag))
            stars.append(Star(
                scene.number, p["star"], p["band"], frame.fault, p["state"], true.saturated, true.mag, photon, p["mag"]
            ))  # fmt: skip
    entries = []
    campaign = Campaign.open(folder)
    for found in campaign.solution().stars:
        k = scene.stars.ids().index(found.star)
        limits = [known[n, found.star].limit_mag for n, t in truth.items()
                  if t.band == found.band and not t.fault and (n, found.star) in known]  # fmt: skip
        mean = float(np.mean(np.square(limits)) / max(found.n_frames, 1)) if limits else np.inf
        sigma = float(np.sqrt(scene.stars.catalogue_err[found.band][k] ** 2 + mean))
        wrong = float(scene.stars.wrong_by[found.band][k])
        entries.append(Entry(scene.number, found.star, found.band, wrong, sigma, found.n_frames, found.word))
    campaign.book.close()
    return stars, entries


def one_host(number: int, seed: int, plan: Plan, ways: tuple[str, ...], calibration: Path, place: Path, keep: bool) -> Results:  # fmt: skip  # noqa: E501
    """Render, reduce in every way, compare."""
    scene = draw_scene(seed, number, plan)
    mine = place / f"host{number:03d}"
    truth = render_host(scene, calibration, mine, seed)
    frames: list[Frame] = []
    nights: list[Night] = []
    stars: list[Star] = []
    entries: list[Entry] = []
    seconds = {}
    for way in ways:
        folder, spent = reduce_host(scene, mine, way)
        seconds[way] = spent / len(truth)
        of_frames, of_nights = ask_target(scene, way, folder, truth)
        frames += of_frames
        nights += of_nights
        if way == ways[0]:
            stars, entries = ask_stars(scene, folder, truth)
    if not keep:
        shutil.rmtree(mine)
    return Results(tuple(frames), tuple(nights), tuple(stars), tuple(entries), seconds)


def run(numbers: Iterable[int], seed: int, plan: Plan, ways: tuple[str, ...], place: Path, processes: int, keep: bool) -> Results:  # fmt: skip  # noqa: E501
    """Many hosts, side by side."""
    numbers = list(numbers)
    calibration = place / "calibration"
    camera = draw_scene(seed, 0, plan).camera
    if not calibration.exists():
        write_calibration(calibration, make_detector(camera, seed), plan.bands, seed)
    task = partial(one_host, seed=seed, plan=plan, ways=ways, calibration=calibration, place=place, keep=keep)
    with ProcessPoolExecutor(processes) as pool:
        found = []
        for result in pool.map(task, numbers):
            found.append(result)
            print(f"{len(found)} of {len(numbers)} hosts", file=sys.stderr, flush=True)
    seconds = {way: float(np.mean([r.seconds[way] for r in found])) for way in ways}
    return Results(
        tuple(x for r in found for x in r.frames), tuple(x for r in found for x in r.nights),
        tuple(x for r in found for x in r.stars), tuple(x for r in found for x in r.entries), seconds,
    )  # fmt: skip


def write_points(path: Path, frames: Iterable[Frame]) -> None:
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, [f.name for f in fields(Frame)])
        writer.writeheader()
        writer.writerows(asdict(frame) for frame in frames)


def main() -> int:
    parser = ArgumentParser(description="Photometry on bright hosts against rendered truth.")
    parser.add_argument("--hosts", type=int, default=4)
    parser.add_argument("--small", type=int, default=0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--ways", default="host,reference")
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--keep", type=Path)
    parser.add_argument("--points", type=Path)
    parser.add_argument("--quick", action="store_true")
    args = parser.parse_args()
    ways = tuple(args.ways.split(","))
    plan, hosts = (QUICK, 2) if args.quick else (FULL, args.hosts)
    place = Path(args.keep or tempfile.mkdtemp(prefix="bright-hosts-"))
    try:
        full = small = None
        if hosts:
            full = run(range(hosts), args.seed, plan, ways, place / "full", args.processes, bool(args.keep))
        if args.small:
            numbers = range(1000, 1000 + args.small)
            small = run(numbers, args.seed, SMALL, ("host",), place / "small", args.processes, bool(args.keep))
        if args.points:
            write_points(args.points, [*(full.frames if full else ()), *(small.frames if small else ())])
    finally:
        if not args.keep:
            shutil.rmtree(place)
    lines, broken = table(full, small)
    print("\n".join(lines))
    return int(broken > 0)


if __name__ == "__main__":
    sys.exit(main())
