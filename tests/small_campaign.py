"""Campaigns on a few of the demo's frames, and the command as a user runs it."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import time
from collections.abc import Callable, Iterable
from dataclasses import replace
from pathlib import Path
from typing import IO, Any

from reduce.campaign.door import Campaign
from reduce.logbook.store import Logbook
from reduce.records import Target

FIRST = "2025-02-26/20250226-"
SECOND = "2025-02-28/20250228-"
BIAS = [f"{FIRST}{n:03}-bias.fits" for n in range(16, 20)]
DARKS = [f"{FIRST}{n:03}-dark.fits" for n in range(26, 36)]
FLATS = [f"{FIRST}{n:03}-flatB.fits" for n in range(1, 4)] + [f"{FIRST}{n:03}-flatV.fits" for n in range(6, 9)]
CALIBRATION = BIAS + DARKS + FLATS
LIGHTS = [f"{FIRST}036-B.fits", f"{FIRST}037-B.fits", f"{FIRST}039-V.fits", f"{FIRST}040-V.fits",
          f"{SECOND}006-B.fits", f"{SECOND}009-V.fits"]  # fmt: skip
OTHER_FIELD = "2025-03-09/20250309-013-V.fits"
LONG_AGO_S = 3600.0
ENOUGH_S = 60.0
"""A wait that ends by itself on any machine; what is waited for comes much sooner."""
COMMAND = [sys.executable, "-m", "tui.cli"]


def target_of(demo: Any) -> Target:
    truth = json.loads((demo.place / "truth.json").read_text())
    names = ("ra_deg", "dec_deg", "z", "ebv_mw", "host_ra_deg", "host_dec_deg")
    return Target(name=truth["target"], kind="type_ia", **{name: truth[name] for name in names})


def lay(demo: Any, frames: Path, paths: Iterable[str], age_s: float = LONG_AGO_S) -> list[Path]:
    """Copy frames of the demo into a folder, as if they had landed some time ago."""
    frames.mkdir(parents=True, exist_ok=True)
    laid = []
    for path in paths:
        place = frames / Path(path).name
        shutil.copyfile(demo.frames / path, place)
        make_old(place, age_s)
        laid.append(place)
    return laid


def make_old(path: Path, age_s: float = LONG_AGO_S) -> Path:
    then = time.time() - age_s
    os.utime(path, (then, then))
    return path


def make_campaign(demo: Any, place: Path, paths: Iterable[str], targets: Iterable[Target] = ()) -> Path:
    """A campaign, not reduced yet, on copies of some of the demo's frames in ``place/frames``."""
    lay(demo, place / "frames", paths)
    campaign = Campaign.create(
        place / "campaign", place / "frames", demo.place / "comparison.csv", list(targets) or [target_of(demo)],
        settings_text=(demo.place / "observatory.toml").read_text(),
    )  # fmt: skip
    campaign.book.close()
    return place / "campaign"


def reduce_here(folder: Path) -> None:
    """Reduce what has landed, by the door that scripts use."""
    with opened(folder) as campaign:
        for _ in campaign.reduce(workers=2):
            pass


class opened:
    """A campaign that is closed at the end of the block."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def __enter__(self) -> Campaign:
        self.campaign = Campaign.open(self.folder)
        return self.campaign

    def __exit__(self, *_: object) -> None:
        self.campaign.book.close()


def fadeline(*words: object, code: int = 0) -> subprocess.CompletedProcess[str]:
    """Run the command to its end; it must leave with this code and without a traceback."""
    done = subprocess.run([*COMMAND, *map(str, words)], capture_output=True, text=True, check=False, cwd="/")
    assert "Traceback" not in done.stderr, done.stderr
    assert done.returncode == code, done.stdout + done.stderr
    return done


def reduce_json(folder: Path, code: int = 0) -> tuple[dict[str, dict], dict]:
    """``fadeline reduce --json``: rows by file name, and the summary."""
    *rows, summary = [json.loads(line) for line in fadeline("reduce", folder, "--json", code=code).stdout.splitlines()]
    names = [row["file"] for row in rows]
    assert len(set(names)) == len(names)
    return {row["file"]: row for row in rows}, summary


def start_reduce(folder: Path, *options: str, stdin: int | IO[bytes] = subprocess.DEVNULL) -> subprocess.Popen[str]:
    """``fadeline reduce`` beside the test, in a session of its own."""
    return subprocess.Popen(
        [*COMMAND, "reduce", str(folder), "--json", *options],
        stdin=stdin, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True, cwd="/",
    )  # fmt: skip


def wait_until(what: Callable[[], Any], timeout_s: float = ENOUGH_S) -> Any:
    """The first true value of ``what``."""
    end = time.monotonic() + timeout_s
    while time.monotonic() < end:
        if found := what():
            return found
    raise AssertionError(f"it did not happen within {timeout_s:g} s")


def reductions(folder: Path) -> set[tuple[str, str]]:
    """(frame, recipe) of all stored measurements."""
    with Logbook.open(folder) as book:
        return book.reductions_done()


def curves(folder: Path) -> list[Any]:
    """Nightly and frame points of all targets."""
    with opened(folder) as campaign:
        return [
            point
            for target in campaign.targets()
            for per_frame in (False, True)
            for point in campaign.curve(target.name, per_frame=per_frame)
        ]


def processes_below(session: int) -> list[int]:
    """Ids of living processes of a session."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                words = (entry / "stat").read_text().rpartition(")")[2].split()
            except OSError:
                continue
            if words[0] != "Z" and int(words[3]) == session:
                found.append(int(entry.name))
    return found


def moved(target: Target, name: str, east_arcsec: float = 0.0, north_arcsec: float = 0.0) -> Target:
    """The same kind of target elsewhere."""
    return replace(
        target,
        name=name,
        ra_deg=target.ra_deg + east_arcsec / 3600 / 0.93,
        dec_deg=target.dec_deg + north_arcsec / 3600,
    )
