"""Planes over the frame, on invented nights: found where they are, absent where they are not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from synthetic_nights import SETTINGS, TARGET, Shot, invented_field, measure, nightly_shots

from reduce.curve.nights import make_points
from reduce.records import Choices, Point, Sequence
from reduce.standard.position import sides
from reduce.standard.solve import StandardSolution, solve_standard

EAST_SIDE, WEST_SIDE = 1.5, 181.2
MAGS = {"B": 15.4, "V": 14.6, "R": 14.15, "I": 13.75}
"""As red as the comparison stars are on average."""


def flipped(shots: list[Shot], plane: tuple[float, float]) -> list[Shot]:
    """Every other night on the other side of the pier, the same plane on the detector."""
    return [
        replace(shot, rotation_deg=WEST_SIDE if int(shot.name[1:3]) % 2 else EAST_SIDE, plane_mag=plane)
        for shot in shots
    ]


def solved(shots: list[Shot], seed: int, off_centre: bool = False) -> tuple[StandardSolution, tuple[Point, ...]]:
    rng = np.random.default_rng(seed)
    shots = [replace(shot, target_mag=MAGS) for shot in shots]
    field = invented_field(rng, 30)
    target = replace(TARGET, dec_deg=TARGET.dec_deg + 200 / 3600) if off_centre else TARGET
    measured = [measure(shot, field, rng, [target]) for shot in shots]
    solution = solve_standard(measured, field.sequence, Choices(), SETTINGS)
    return solution, make_points(solution, (target,), Choices())[0]


def errors(points: tuple[Point, ...]) -> np.ndarray:
    return np.array([point.mag - MAGS[point.band] for point in points if point.mag is not None])


def test_orientations_are_told_apart_across_north() -> None:
    rotation = np.array([359.0, 1.0, 180.5, 90.0, 183.0, 355.0])
    got = sides(rotation, np.array([False, False, False, False, False, False]))
    assert got[0] == got[1] == got[5]
    assert got[2] == got[4]
    assert len(set(got.tolist())) == 3
    assert len(set(sides(rotation[:2], np.array([False, True])).tolist())) == 2


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_meridian_flip_does_not_step_the_light_curve(seed: int) -> None:
    shots = flipped(nightly_shots(nights=10, repeats=2, bands="VR", rise=0.0), (0.004, -0.012))
    solution, points = solved(shots, seed, off_centre=True)
    assert all("zero point changes over the frame" in note for note in solution.notes if "pier" in note)
    assert sum("one plane" in note for note in solution.notes) == 2
    error = errors(points)
    west = np.array([int(point.file[1:3]) % 2 == 1 for point in points])
    # Without the plane the sides differ by 2 · 0.012 · 200/256 = 19 mmag.
    assert abs(error[west].mean() - error[~west].mean()) < 0.003
    pull = error / np.array([np.hypot(point.err, point.err_night) for point in points])
    assert np.std(pull) < 1.3


def test_seasons_without_a_plane_get_none_and_stay_what_they_were() -> None:
    found = 0
    for seed in range(12):
        shots = flipped(nightly_shots(nights=6, repeats=2, bands="VR"), (0.0, 0.0))
        solution, _ = solved(shots, seed)
        found += sum("over the frame" in note for note in solution.notes)
        found += sum(frame.target_shift_mag.any() for system in solution.systems for frame in system.frames)
    assert found == 0


def test_a_catalogue_worse_than_it_says_is_not_taken_for_a_plane() -> None:
    found = 0
    for seed in range(12):
        rng = np.random.default_rng(seed)
        field = invented_field(rng, 30, error=0.02, bands="VR")
        said = {band: np.full(30, 0.004) for band in "VR"}
        sequence = Sequence("s", field.sequence.ids, field.sequence.ra_deg, field.sequence.dec_deg,
                            field.sequence.mag, said)  # fmt: skip
        shots = nightly_shots(nights=6, repeats=2, bands="VR")
        measured = [measure(shot, field, rng) for shot in shots]
        notes = solve_standard(measured, sequence, Choices(), SETTINGS).notes
        found += sum("over the frame" in note for note in notes)
    assert found <= 1  # of 24


def test_each_side_of_the_pier_may_have_its_own_plane() -> None:
    shots = [
        replace(shot, plane_mag=(0.0, 0.012) if shot.rotation_deg == WEST_SIDE else (0.01, 0.0))
        for shot in flipped(nightly_shots(nights=10, repeats=2, bands="V"), (0.0, 0.0))
    ]
    solution, points = solved(shots, 4, off_centre=True)
    assert any("each side of the pier" in note for note in solution.notes)
    error = errors(points)
    assert np.abs(error.mean()) < 0.006
    assert np.std(error) < 0.008


def test_thin_cloud_across_one_frame_is_a_plane_and_not_noise() -> None:
    shots = nightly_shots(nights=6, repeats=3, bands="V", rise=0.0)
    cloudy = [replace(shot, plane_mag=(0.03, 0.05)) if k == 7 else shot for k, shot in enumerate(shots)]
    solution, points = solved(cloudy, 5, off_centre=True)
    frames = {frame.stars.frame: frame for frame in solution.systems[0].frames}
    one, other = frames[cloudy[7].name], frames[cloudy[8].name]
    assert one.target_shift_mag[0] == pytest.approx(-0.05 * 200 / 256, abs=0.006)
    assert not other.target_shift_mag.any()
    assert one.zp_err_mag < 1.5 * other.zp_err_mag
    error = dict(zip([point.file for point in points], errors(points), strict=True))
    assert abs(error[cloudy[7].name]) < 0.02
    plain, _ = solved(shots, 5, off_centre=True)
    assert not any(frame.target_shift_mag.any() for frame in plain.systems[0].frames)
