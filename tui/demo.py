"""The demo: render the invented campaign, reduce it, and hold the result against what was rendered."""

from __future__ import annotations

import os
import threading
import time
from collections import defaultdict
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from demo_frames.render import Truth, read_truth, render
from reduce.campaign.door import Campaign
from reduce.plain_text import PlainError
from reduce.records import Point, Target
from reduce.version import version

NIGHT_EVERY_S = 6.0
"""In the app, one of the campaign's nights lands in this time."""


WRITTEN_AT = 1_743_465_600
"""2025-04-01: the demo's last night is over."""


class DemoError(PlainError):
    """The demo cannot be put where it was asked."""


def prepare_demo(place: Path, seed: int, scatter: bool, progress: Callable[[str], None]) -> Path:
    """Folder of a campaign on freshly rendered frames, or of the same demo made earlier.

    Raises
    ------
    DemoError
        The folder holds something else.
    """
    campaign_folder = place / "campaign"
    if (place / "truth.json").exists():
        truth = read_truth(place)
        if (truth.seed, truth.scatter) != (seed, scatter):
            raise DemoError(f"{place} holds the demo of seed {truth.seed}: choose another --folder, or remove it.")
        if campaign_folder.exists():
            return campaign_folder
    elif place.exists() and any(place.iterdir()):
        raise DemoError(f"{place} is not empty and holds no demo: choose another --folder.")
    else:
        truth = render(place, seed, scatter, lambda done, n: progress(f"rendering frame {done} of {n}"))
        _let_rest(place / "frames")
        (place / "frames").rename(place / "to-come")
        (place / "frames").mkdir()
        progress("")
    Campaign.create(
        campaign_folder,
        place / "frames",
        place / "comparison.csv",
        [_target(truth)],
        settings_text=(place / "observatory.toml").read_text(encoding="utf-8"),
    )
    return campaign_folder


def _let_rest(frames: Path) -> None:
    """Give the files the age of the campaign: a file cut short is then known for one, not waited for."""
    for path in frames.rglob("*"):
        os.utime(path, (WRITTEN_AT, WRITTEN_AT))


def deliver_night(place: Path) -> bool:
    """Let the next night's frames land in the frames folder; False when all have landed."""
    nights = sorted((place / "to-come").iterdir()) if (place / "to-come").exists() else []
    if not nights:
        return False
    nights[0].rename(place / "frames" / nights[0].name)
    return True


def deliver_nights(place: Path, stop: threading.Event) -> None:
    """Let one night after the other land until all have, or until stopped; for a thread beside the app."""
    while not stop.is_set() and deliver_night(place):
        stop.wait(NIGHT_EVERY_S)


def _target(truth: Truth) -> Target:
    return Target(
        name=truth.target, kind="type_ia", ra_deg=truth.ra_deg, dec_deg=truth.dec_deg, z=truth.z, ebv_mw=truth.ebv_mw,
        ebv_scale=truth.ebv_scale, spectroscopic_type="Ia",
        host_ra_deg=truth.host_ra_deg, host_dec_deg=truth.host_dec_deg,
    )  # fmt: skip


def report_demo(
    place: Path, campaign_folder: Path, workers: int | None, progress: Callable[[str], None]
) -> dict[str, Any]:
    """Reduce the demo and compare: the object that ``fadeline demo --headless --json`` prints."""
    start = time.monotonic()
    truth = read_truth(place)
    campaign = Campaign.open(campaign_folder)
    # Two evenings by themselves, so that the second brings flats that the first had to do without; then the rest.
    for evenings in (1, 1, len(truth.frames)):
        for _ in range(evenings):
            deliver_night(place)
        for _ in campaign.reduce(workers=workers, progress=progress):
            pass
    picture = campaign.snapshot()
    rows = [row for row in picture.frames if row.kind == "light" or row.outcome == "unreadable"]
    targets = []
    for view in picture.targets:
        estimate = view.estimate
        targets.append({
            "name": view.target.name,
            "kind": view.target.kind,
            "mu": estimate.mu if estimate else None,
            "mu_err": estimate.mu_err if estimate else None,
            "mu_err_fit": estimate.mu_err_fit if estimate else None,
            "mu_true": truth.mu_true,
            "nights": len({p.night for p in view.night_points if p.state == "kept"}),
            "frames_kept": sum(row.state == "kept" for row in rows),
            "frames_doubtful": sum(row.state == "doubtful" for row in rows),
            "frames_dropped": sum(row.state == "dropped" for row in rows),
        })  # fmt: skip
    view = picture.targets[0]
    return {
        "targets": targets,
        "photometry": compare_photometry(view.night_points, view.frame_points, truth),
        "seconds": round(time.monotonic() - start, 2),
        "version": version(),
        "folder": str(place),
    }


def compare_photometry(
    night_points: Sequence[Point], frame_points: Sequence[Point], truth: Truth
) -> dict[str, dict[str, float | int]]:
    """Measured minus true per band, over the nightly points that were kept.

    The truth of a nightly point is the mean true magnitude of its kept frames, weighted as the frames are.
    ``chi2_reduced`` counts the errors that a night has for itself (``err`` and ``err_night``), not ``err_band``.
    """
    true_mag = {frame.file: frame.true_mag for frame in truth.frames if frame.true_mag is not None}
    parts: defaultdict[tuple[str, str], list[tuple[float, float]]] = defaultdict(list)
    for point in frame_points:
        if point.state == "kept" and point.file in true_mag:
            parts[point.night, point.band].append((true_mag[point.file], point.flux_err**-2))
    offsets: defaultdict[str, list[tuple[float, float]]] = defaultdict(list)
    for point in night_points:
        frames = parts.get((point.night, point.band))
        if point.state != "kept" or point.mag is None or not frames:
            continue
        true = float(np.average([mag for mag, _ in frames], weights=[weight for _, weight in frames]))
        offsets[point.band].append((point.mag - true, float(np.hypot(point.err or 0.0, point.err_night or 0.0))))
    result: dict[str, dict[str, float | int]] = {}
    for band in sorted(offsets, key="BVRIgri".index):
        offset, error = np.array(offsets[band]).T
        result[band] = {
            "mean_offset": round(float(offset.mean()), 5),
            "chi2_reduced": round(float(np.mean((offset / error) ** 2)), 3),
            "n": len(offset),
        }
    return result
