"""How long after a 1k frame has landed its after-slew line can be drawn: reducer and picture as the app runs them.

    python tests/benchmarks/bench_arrival.py [--demo DEMO_FOLDER] [--frames N] [--app-poll S]

The demo's frames are laid into 1024 × 1024 pixels of the same sky. The limit of the app is two seconds.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

LIMIT_S = 2.0
SIDE = 1024
HISTORY_NIGHTS = 5
ENOUGH_S = 120.0


def enlarge(path: Path, place: Path, rng: np.random.Generator) -> None:
    """The frame in the middle of a larger one: noise of its own sky about a light, its own mean about the others."""
    from astropy.io import fits

    with fits.open(path) as hdus:
        image = next(hdu for hdu in hdus if hdu.data is not None)
        data, header = image.data.astype(np.float64), image.header
    middle, spread = np.median(data), 1.4826 * np.median(np.abs(data - np.median(data)))
    large = rng.normal(middle, spread, (SIDE, SIDE))
    y, x = (SIDE - data.shape[0]) // 2, (SIDE - data.shape[1]) // 2
    large[y : y + data.shape[0], x : x + data.shape[1]] = data
    for key in ("BSCALE", "BZERO"):
        header.remove(key, ignore_missing=True)
    place.parent.mkdir(parents=True, exist_ok=True)
    fits.PrimaryHDU(np.clip(np.rint(large), 0, 65535).astype(np.uint16), header).writeto(place, overwrite=True)


def new_campaign(demo: Path, folder: Path, frames: Path) -> Campaign:
    """A campaign on the demo's target and stars that has measured nothing yet."""
    from reduce.campaign.door import Campaign
    from reduce.records import Target

    truth = json.loads((demo / "truth.json").read_text())
    names = ("ra_deg", "dec_deg", "z", "ebv_mw", "host_ra_deg", "host_dec_deg")
    target = Target(name=truth["target"], kind="type_ia", **{name: truth[name] for name in names})
    text = (demo / "observatory.toml").read_text()
    return Campaign.create(folder, frames, demo / "comparison.csv", [target], settings_text=text)


def prepare(demo: Path, place: Path) -> tuple[Path, list[Path]]:
    """A campaign with some nights reduced, and the frames of the next night that have not landed yet."""
    from reduce.campaign.door import Campaign

    rng = np.random.default_rng(1)
    nights = sorted((demo / "frames").iterdir())
    for night in nights[: HISTORY_NIGHTS + 1]:
        for path in sorted(night.iterdir()):
            where = "frames" if night != nights[HISTORY_NIGHTS] else "to-come"
            try:
                enlarge(path, place / where / night.name / path.name.removesuffix(".fz"), rng)
            except (OSError, TypeError, StopIteration):
                continue  # the demo has broken files among its frames
    campaign = new_campaign(demo, place / "campaign", place / "frames")
    for report in campaign.reduce():
        print(report.sentence)
    campaign.book.close()
    night = place / "to-come" / nights[HISTORY_NIGHTS].name
    calibration = [p for p in sorted(night.iterdir()) if any(k in p.name for k in ("flat", "bias", "dark"))]
    for path in calibration:  # at the start of the night, long before its first light
        target_place = place / "frames" / night.name / path.name
        target_place.parent.mkdir(exist_ok=True)
        path.rename(target_place)
    for _ in Campaign.open(place / "campaign").reduce():
        pass
    return place / "campaign", sorted(night.iterdir())


async def land(campaign: Path, frames: list[Path], poll_s: float) -> list[float]:
    """Seconds from each frame's landing to a snapshot that holds its after-slew line."""
    from tui.live import LiveDesk

    desk, times = LiveDesk(campaign), []
    snapshot, seen = await desk.snapshot(), desk.stamp()
    for path in frames:
        place = Path(str(path).replace("to-come", "frames"))
        await asyncio.sleep(3.0)  # between exposures the reducer is idle
        place.parent.mkdir(exist_ok=True)
        shutil.copyfile(path, place.with_suffix(".part"))
        place.with_suffix(".part").rename(place)
        began = time.monotonic()
        marks: list[str] = []
        while time.monotonic() - began < ENOUGH_S:
            if (stamp := desk.stamp()) != seen:
                seen, asked = stamp, time.monotonic()
                snapshot = await desk.snapshot()
                marks.append(f"{asked - began:.2f}+{time.monotonic() - asked:.2f}")
                if snapshot.after_slew is not None and snapshot.after_slew.file == place.name:
                    break
            await asyncio.sleep(poll_s)
        times.append(time.monotonic() - began)
        line = snapshot.after_slew
        pictures = ", ".join(marks)
        print(f"{place.name}: {times[-1]:.2f} s  (pictures asked at + took: {pictures})  {line and line.advice}")
    desk.close()
    return times


def main() -> None:
    """Print one line a frame and the summary."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--demo", type=Path)
    parser.add_argument("--place", type=Path, help="Where to work; what an earlier run prepared there is used.")
    parser.add_argument("--frames", type=int, default=8)
    parser.add_argument("--app-poll", type=float, default=None)
    args = parser.parse_args()
    from reduce.runner import prepare_processes
    from tui.app import POLL_S
    from tui.reducer_process import ReducerProcess

    place = args.place or Path(tempfile.mkdtemp(prefix="bench-arrival-"))
    demo = args.demo
    if demo is None:
        demo = place / "demo"
        subprocess.run([sys.executable, "-m", "tui.cli", "demo", "--headless", "--folder", str(demo)], check=True)
    os.environ["OPENBLAS_NUM_THREADS"] = "1"
    if (place / "campaign").exists():
        campaign, frames = place / "campaign", sorted(next((place / "to-come").iterdir()).iterdir())
        frames = [path for path in frames if not Path(str(path).replace("to-come", "frames")).exists()]
    else:
        campaign, frames = prepare(demo, place)
    prepare_processes(("reduce.campaign.picture",))
    reducer = ReducerProcess(campaign, print)
    reducer.keep_running()
    try:
        poll_s = POLL_S if args.app_poll is None else args.app_poll
        times = asyncio.run(land(campaign, frames[: args.frames], poll_s))
    finally:
        reducer.stop()
    times = times[1:]  # the first pays for the start of the processes
    late = sum(value > LIMIT_S for value in times)
    print(f"median {np.median(times):.2f} s, longest {max(times):.2f} s of {len(times)}; {late} later than {LIMIT_S} s")
    print("load of this machine:", *(f"{value:.1f}" for value in os.getloadavg()))


if __name__ == "__main__":
    main()
