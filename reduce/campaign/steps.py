"""The line of steps of a target: what is done, what waits, what wants the observer."""

from __future__ import annotations

from collections.abc import Sequence

from reduce.records import Estimate, Point, Target
from reduce.views import FrameRow, Step

AGAIN = "to measure again"
BY_SETTINGS = "observatory.toml"
"""A reason that names the settings file is mended in Setup."""


def _count(n: int, word: str) -> str:
    return f"{n} {word}" if n == 1 else f"{n} {word}s"


def steps_of(
    target: Target,
    rows: Sequence[FrameRow],
    unreadable: int,
    missing_masters: Sequence[str],
    night_points: Sequence[Point],
    estimate: Estimate | None,
) -> tuple[tuple[Step, ...], str, str]:
    """Steps of one target, the sentence on what wants doing next, and the screen where it is done.

    Parameters
    ----------
    rows
        Light frames of this campaign; those measured on the target list its name in ``targets``.
    unreadable
        Number of files that could not be read.
    missing_masters
        One sentence a kind of master that these frames still lack.
    night_points
        Nightly points of the target.
    """
    mine = [row for row in rows if target.name in row.targets]
    lost = [row for row in rows if row.outcome == "no match" and not row.by_person]
    beside = [row for row in rows if row.outcome == "measured" and target.name not in row.targets]
    waiting = [row for row in rows if row.outcome == "waiting"]
    provisional = sum(row.provisional for row in mine)
    kept = sum(row.state == "kept" for row in mine)
    doubtful = [row for row in mine if row.state == "doubtful" and not row.by_person]
    good = [point for point in night_points if point.state == "kept"]
    nights = len({point.night for point in good})

    frames = _frames_step(mine, waiting, unreadable)
    calibration = (
        Step("Calibration", "waiting", missing_masters[0])
        if missing_masters
        else Step("Calibration", "waiting", f"{_count(provisional, 'frame')} {AGAIN}")
        if provisional
        else Step("Calibration", "done" if mine else "waiting", "all masters found" if mine else "")
    )
    field = (
        Step("Field", "wants you", f"not on {_count(len(beside), 'frame')}")
        if beside and not mine
        else Step("Field", "wants you", f"{_count(len(lost), 'frame')} not recognised")
        if lost and not mine
        else Step("Field", "done", f"{_count(len(mine), 'frame')} recognised")
        if mine
        else Step("Field", "waiting", "")
    )
    photometry = (
        Step("Photometry", "wants you", f"{_count(len(doubtful), 'doubtful frame')}")
        if doubtful
        else Step("Photometry", "done" if kept else "waiting", f"{kept} kept" if mine else "")
    )
    curve = Step("Light curve", "done" if good else "waiting", _count(nights, "night") if good else "")
    if estimate is not None and estimate.mu is not None and estimate.mu_err is not None:
        distance = Step("Distance", "done", f"μ = {estimate.mu:.2f} ± {estimate.mu_err:.2f}")
    else:
        distance = Step("Distance", "waiting", "cannot tell yet" if good else "")
    steps = (frames, calibration, field, photometry, curve, distance)
    unset = [row for row in rows if row.outcome == "unreadable" and BY_SETTINGS in row.reason]
    if unset and not mine:
        return steps, f"{_count(len(unset), 'frame')} cannot be measured yet: {unset[0].reason}", "Setup"
    if beside and not mine:
        sentence = f"{target.name} is not on any of {_count(len(beside), 'recognised frame')}: compare its position."
        return steps, sentence, "Field"
    return steps, *_next(steps, doubtful, lost, unreadable, estimate, good)


def _frames_step(mine: Sequence[FrameRow], waiting: Sequence[FrameRow], unreadable: int) -> Step:
    if not mine:
        return Step("Frames", "waiting", f"{_count(len(waiting), 'frame')} being reduced" if waiting else "none yet")
    rest = f", {len(waiting)} being reduced" if waiting else f", {unreadable} unreadable" if unreadable else ""
    return Step("Frames", "waiting" if waiting else "done", _count(len(mine), "frame") + rest)


def _next(
    steps: Sequence[Step],
    doubtful: Sequence[FrameRow],
    lost: Sequence[FrameRow],
    unreadable: int,
    estimate: Estimate | None,
    good: Sequence[Point],
) -> tuple[str, str]:
    state = {step.name: step for step in steps}
    if state["Field"].state == "wants you":
        return f"No frame was recognised: {lost[0].reason}", "Frames"
    if state["Frames"].state == "waiting":
        return ("Frames are being reduced." if "reduced" in state["Frames"].detail else "Waiting for frames."), "Frames"
    if doubtful:
        first = doubtful[0]
        return (
            f"{_count(len(doubtful), 'doubtful frame')}: keep or drop them ({first.file}: {first.reason})",
            "Frames",
        )
    if state["Calibration"].state == "waiting":
        if state["Calibration"].detail.endswith(AGAIN):
            return f"{state['Calibration'].detail}: that happens by itself.", "Frames"
        return f"{state['Calibration'].detail}: take it at dawn, frames are measured again by themselves.", "Frames"
    if good and (estimate is None or estimate.mu is None):
        return estimate.verdict if estimate is not None else "No estimate yet.", "Distance"
    if unreadable:
        return f"{_count(unreadable, 'file')} could not be read; everything else is done.", "Frames"
    return "Nothing wants you: go on observing.", "Light curve"
