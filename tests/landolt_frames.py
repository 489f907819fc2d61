"""Published standard fields rendered as frames: FADELINE_REFERENCE=… python tests/landolt_frames.py [--seed S] …

Two nights follow four fields of Landolt (1992, AJ 104, 340; 2009, AJ 137, 4186) from low to high airmass with a known
zero point, first-order extinction and colour term in B V R I; the command reduces them, and what it prints is held
against what was put in. Each must be recovered within 0.01.
"""

from __future__ import annotations

import csv
import json
import os
import shutil
import sys
import tempfile
from argparse import ArgumentParser
from collections.abc import Iterable, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import lru_cache, partial
from pathlib import Path

import galsim
import numpy as np
from bright_host_files import write_calibration, write_light
from bright_host_frames import Optics, airmass_of, image_of, make_detector
from bright_host_scene import (
    BANDS,
    COLOUR_TERM,
    FIRST_ORDER,
    SITE,
    ZERO_POINT,
    Host,
    Part,
    Plan,
    Scene,
    Stars,
    draw_scene,
)
from bright_hosts import NAME, fadeline, write_sequence

FIELDS = ("98 ", "RU 149", "PG0918+029")
"""Beginnings of the names of fields that share a winter's night."""
EXPOSURE_S = 60.0
NIGHT_MJD = (60324.0, 60331.0)
"""Midnights at longitude 0 when these fields pass the meridian in the evening and at night."""
VISITS = 5
HIGHEST_AIRMASS = 2.4
BOUND = 0.01


@dataclass(frozen=True)
class Truth:
    """What one band was rendered with."""

    zp_mag: dict[str, float]
    """Night (ISO date of its evening) → zero point above the air for the light within 4 FWHM."""
    first_order: float
    term: float


def read_standards(path: Path) -> dict[str, dict[str, float]]:
    """Star → ra, dec (degrees) and B V R I; the 2009 values where there are any."""
    with path.open(encoding="utf-8") as stream:
        rows = list(csv.DictReader(line for line in stream if not line.startswith("#")))
    found = {}
    for row in rows:
        new = "_09" if row["V_09"] else ""
        if not new:
            continue  # positions of 1992 are whole arcseconds
        v, bv, vr, ri = (float(row[name + new]) for name in ("V", "B-V", "V-R", "R-I"))
        found[row["name"]] = {
            "ra": float(row["ra_deg_09"]), "dec": float(row["dec_deg_09"]),
            "B": v + bv, "V": v, "R": v - vr, "I": v - vr - ri,
        }  # fmt: skip
    return found


def field_scene(seed: int, number: int, name: str, standards: Mapping[str, Mapping[str, float]]) -> Scene | None:
    """One field with its standards and faint stars of our own; None where fewer than three are known."""
    mine = [star for key, star in standards.items() if key.startswith(name)]
    if len(mine) < 3:
        return None
    rng = np.random.default_rng([seed, number, 11])
    base = draw_scene(seed, number, Plan(nights=1, references_per_band=0, wrong_stars=0, faults_per_night=0))
    ra, dec = (float(np.median([star[key] for star in mine])) for key in ("ra", "dec"))
    n_faint = 60
    v, bv = rng.uniform(14.5, 19, n_faint), rng.uniform(0.4, 1.3, n_faint)
    faint = {"B": v + bv, "V": v, "R": v - 0.57 * bv, "I": v - 1.1 * bv}
    mag = {band: np.append([star[band] for star in mine], faint[band]) for band in BANDS}
    east, north = rng.uniform(-0.1, 0.1, (2, n_faint))
    n = len(mine)
    stars = Stars(
        np.append([star["ra"] for star in mine], ra + east), np.append([star["dec"] for star in mine], dec + north),
        mag, n, {b: mag[b][:n] for b in BANDS}, {b: np.full(n, 0.002) for b in BANDS},
        {b: np.zeros(n) for b in BANDS},
    )  # fmt: skip
    nothing = Host("none", ra, dec + 0.02, (Part("knot", dict.fromkeys(BANDS, 60.0), 1.0),))
    dark = (dict.fromkeys(BANDS, 60.0),)
    return replace(
        base, ra_deg=ra, dec_deg=dec, stars=stars, host=nothing, target_ra_deg=ra, target_dec_deg=dec + 0.02,
        target_mag=dark, shots=(),
    )  # fmt: skip


def plan_nights(seed: int, scenes: list[Scene]) -> list[tuple[Scene, int, float]]:
    """(field, night, start MJD) of visits that run from low to high airmass."""
    rng = np.random.default_rng([seed, 12])
    visits = []
    for night, midnight in enumerate(NIGHT_MJD):
        for scene in scenes:
            moments = midnight + np.linspace(-0.25, 0.28, 80)
            up = [m for m in moments if 1 <= airmass_of(scene, m) <= HIGHEST_AIRMASS]
            for moment in np.linspace(up[0], up[-1], VISITS) if up else ():
                visits.append((scene, night, float(moment + rng.uniform(0, 0.002))))
    return visits


def aperture_loss(optics: Optics) -> float:
    """Magnitudes of light outside 4 FWHM; the FWHM is the rendered profile's own."""
    profile = optics.psf((optics.camera.nx - 1) / 2, (optics.camera.ny - 1) / 2)
    size = 2 * int(30 * optics.fwhm_px) + 1
    image = image_of(profile, nx=size, ny=size, scale=1.0)
    yy, xx = np.indices(image.shape) - size // 2
    inside = image[np.hypot(xx, yy) <= 4 * galsim.Convolve(profile, galsim.Pixel(1.0)).calculateFWHM()].sum()
    return float(-2.5 * np.log10(inside))


_detector = lru_cache(maxsize=1)(make_detector)


def _write(task: tuple[Scene, Path], detector_seed: int) -> None:
    scene, folder = task
    write_light(folder, scene, scene.shots[0], _detector(scene.camera, detector_seed))


def render(
    place: Path, seed: int, target: Scene, standards: Mapping[str, Mapping[str, float]], processes: int
) -> dict[str, Truth]:
    """Frames, calibration and the sequence of a target that was not observed; what each band was rendered with."""
    scenes = [s for k, name in enumerate(FIELDS) if (s := field_scene(seed, k, name, standards)) is not None]
    camera = replace(scenes[0].camera, scale_arcsec=0.8)
    frames = place / "frames"
    losses: dict[tuple[str, int], list[float]] = {}
    tasks = []
    for k, (scene, night, start) in enumerate(plan_nights(seed, scenes)):
        shots = draw_scene(seed, 500 + k, Plan(1, 1, BANDS, references_per_band=0, faults_per_night=0)).shots
        for b, shot in enumerate(shots):
            shot = replace(
                shot, name=f"std{night + 1}-{k:02d}-{shot.band}.fits", mjd_start=start + b * 0.0008,
                exposure_s=EXPOSURE_S, dimming_mag=0.0, moffat_beta=4.0, size_slope=0.0, seed=(seed, 900 + k, b),
            )  # fmt: skip
            one = replace(scene, camera=camera, shots=(shot,))
            losses.setdefault((shot.band, night), []).append(aperture_loss(Optics(one, shot)))
            tasks.append((one, frames / f"night{night + 1}"))
    with ProcessPoolExecutor(processes) as pool:
        list(pool.map(partial(_write, detector_seed=seed), tasks, chunksize=4))
    write_calibration(frames, make_detector(camera, seed), BANDS, seed, dark_exposures_s=(EXPOSURE_S,))
    write_sequence(place / "sequence.csv", target)
    # A flat is divided by its own median, so that a star keeps the light that a pixel of median response sees.
    response = {band: -2.5 * np.log10(np.median(s)) for band, s in make_detector(camera, seed).sensitivity.items()}
    nights = [str(np.datetime64(int(m) - 40587 - 1, "D")) for m in NIGHT_MJD]
    return {
        band: Truth(
            {
                name: ZERO_POINT[band] - float(response[band] + np.mean(losses[band, n]))
                for n, name in enumerate(nights)
            },
            FIRST_ORDER[band], COLOUR_TERM[band],
        )
        for band in BANDS
    }  # fmt: skip


def compare(printed: Iterable[Mapping], truth: Mapping[str, Truth]) -> tuple[list[str], int]:
    """Lines of a table of what ``fadeline standards --json`` printed, and how many values are off by more than 0.01.

    ``printed`` holds an object a camera, band and season: band, colour_term, nights (night, zp_mag, extinction).
    """
    lines = ["band  night          zero point               k'      colour term   (found - true)"]
    broken, seen = 0, set()
    for row in printed:
        true = truth[row["band"]]
        for night in row["nights"]:
            off = (
                night["zp_mag"] - true.zp_mag[night["night"]],
                night["extinction"] - true.first_order,
                row["colour_term"] - true.term,
            )
            wrong = sum(not abs(value) <= BOUND for value in off)
            broken += wrong
            seen.add((row["band"], night["night"]))
            lines.append(f"{row['band']:<5} {night['night']}   " + "   ".join(f"{value:+14.4f}" for value in off)
                         + ("   BROKEN" if wrong else ""))  # fmt: skip
    missing = {(band, night) for band, true in truth.items() for night in true.zp_mag} - seen
    lines += [f"{band:<5} {night}   not solved   BROKEN" for band, night in sorted(missing)]
    return lines, broken + len(missing)


def main() -> int:
    parser = ArgumentParser(description="Published standard fields through the whole path.")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--keep", type=Path)
    args = parser.parse_args()
    standards = read_standards(Path(os.environ["FADELINE_REFERENCE"]) / "landolt_sample.csv")
    place = Path(args.keep or tempfile.mkdtemp(prefix="landolt-"))
    try:
        target = draw_scene(args.seed, 0, Plan())
        truth = render(place, args.seed, target, standards, args.processes)
        fadeline(
            "new", place / "campaign", "--frames", place / "frames", "--sequence", place / "sequence.csv",
            "--target", f"{NAME},{target.target_ra_deg:.6f},{target.target_dec_deg:.6f},type_ia",
            "--site", "{},{},{}".format(*SITE),
        )  # fmt: skip
        fadeline("reduce", place / "campaign", "--workers", args.processes)
        printed = fadeline("standards", place / "campaign", "--json").splitlines()
        lines, broken = compare(map(json.loads, printed), truth)
    finally:
        if not args.keep:
            shutil.rmtree(place)
    print("\n".join(lines))
    print(f"{broken} values off by more than {BOUND}")
    return int(broken > 0)


if __name__ == "__main__":
    sys.exit(main())
