"""Seconds a frame of ``measure_frame`` on frames of the demo, against a plain photutils script in the same run.

``python tests/benchmarks/bench_frame.py DEMO_FOLDER [--profile]``, where DEMO_FOLDER is what
``fadeline demo --headless --folder DEMO_FOLDER`` made. Both take the same frames one after the other, in one process.
"""

from __future__ import annotations

import argparse
import cProfile
import json
import pstats
import statistics
import tempfile
import time
from collections.abc import Callable
from contextlib import suppress
from functools import cache
from pathlib import Path

import numpy as np
from astropy.io import fits
from plain_photutils import measure as measure_plainly

from reduce.field.sequence import read_sequence
from reduce.frames.master_plans import plan_masters
from reduce.frames.master_sets import Master, choose_masters
from reduce.frames.masters import build_master
from reduce.frames.reader import frame_id, open_frame
from reduce.pipeline import Recipe, measure_frame
from reduce.records import FrameError, Target
from reduce.settings import read_settings

MOST_FRAMES = 12
CALIBRATION = ("bias", "dark", "flat")
GAIN_E_PER_ADU, FWHM_PX = 1.5, 2.7
"""Of the demo; the plain script must be told."""


def seconds_each(work: Callable[[Path], object], paths: list[Path]) -> list[float]:
    """Seconds of every frame after a first one that pays for the imports."""
    work(paths[0])
    found = []
    for path in paths:
        start = time.perf_counter()
        work(path)
        found.append(time.perf_counter() - start)
    return found


def main(folder: Path) -> None:
    """Print both and their ratio."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("demo", type=Path)
    parser.add_argument("--profile", action="store_true")
    asked = parser.parse_args()
    truth = json.loads((asked.demo / "truth.json").read_text())
    paths = [asked.demo / "frames" / row["path"] for row in truth["frames"] if not row["fault"]][:MOST_FRAMES]
    recipes = recipes_of(asked.demo, truth, paths, folder)

    def ours(path: Path) -> object:
        return measure_frame(path, frame_id(path), recipes[path])

    def plain(path: Path) -> object:
        chosen = recipes[path].masters
        assert chosen.bias is not None
        assert chosen.dark is not None
        assert chosen.flat is not None
        bias, dark, flat = (pixels(master.path) for master in (chosen.bias, chosen.dark, chosen.flat))
        return measure_plainly(path, bias, dark - bias, flat, GAIN_E_PER_ADU, FWHM_PX)

    if asked.profile:
        ours(paths[0])
        profile = cProfile.Profile()
        profile.enable()
        for path in paths:
            ours(path)
        profile.disable()
        pstats.Stats(profile).sort_stats("tottime").print_stats(20)
        return
    one, other = seconds_each(ours, paths), seconds_each(plain, paths)
    print(f"measure_frame   {statistics.median(one):.3f} s a frame ({min(one):.3f} to {max(one):.3f})")
    print(f"plain photutils {statistics.median(other):.3f} s a frame ({min(other):.3f} to {max(other):.3f})")
    print(f"ratio           {statistics.median(one) / statistics.median(other):.2f} (of the medians)")


def recipes_of(demo: Path, truth: dict[str, object], paths: list[Path], folder: Path) -> dict[Path, Recipe]:
    """Every frame's recipe, with masters built in ``folder``."""
    settings = read_settings(demo / "observatory.toml")
    target = Target(str(truth["target"]), "type_ia", float(str(truth["ra_deg"])), float(str(truth["dec_deg"])))
    stars = read_sequence(demo / "comparison.csv")
    infos = {}
    for path in sorted((demo / "frames").rglob("*.fits")):
        with suppress(FrameError):  # the demo holds a file that is cut short
            infos[path] = open_frame(path, settings).info
    calibration = [(frame_id(path), path, info) for path, info in infos.items() if info.kind in CALIBRATION]
    masters: list[Master] = []
    for plan in plan_masters(calibration):
        masters.append(build_master(plan, masters, folder, settings))
    return {path: Recipe(settings, choose_masters(infos[path], masters), (target,), stars) for path in paths}


@cache
def pixels(path: Path) -> np.ndarray:
    """A master's image, read once."""
    return np.asarray(fits.getdata(path), dtype=np.float32)


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as masters_folder:
        main(Path(masters_folder))
