"""Comparison sequences that check themselves: wrong entries, lost stars, floor, colours, better stars."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from synthetic_nights import (
    FIRST_MJD,
    SETTINGS,
    TARGET,
    TERMS,
    Field,
    Shot,
    invented_field,
    measure,
    nightly_shots,
)

from reduce.curve.nights import make_points
from reduce.field.standards import chosen
from reduce.records import Choices, Measured, Sequence
from reduce.standard.field_stars import CalibratedFrame, frames_by_sequence, mean_stars, steady
from reduce.standard.sequence_check import SequenceCheck, check_sequence, propose_stars, target_colours
from reduce.standard.solve import solve_standard
from reduce.standard.zeropoint import solve_zero_points

FRAMES = 10


def simulated(seed: int, understated: float = 1.0) -> tuple[list[bool], list[bool]]:
    """Which entries ought to be set aside were, and which sound ones were, of one sequence of 8 to 40 stars.

    One to six of them are wrong by 0.05 to 0.5 mag; stated errors are 0.004 to 0.015 mag, stars differ in brightness.
    """
    rng = np.random.default_rng(seed)
    n = int(rng.integers(8, 41))
    colour = rng.uniform(0.3, 1.3, n)
    stated = rng.uniform(0.004, 0.015, n)
    noise = 10 ** rng.uniform(-2.7, -1.5, n)
    n_wrong = int(rng.integers(1, n // 6 + 2))
    wrong = rng.choice(n, n_wrong, replace=False)
    entry = understated * stated * rng.normal(size=n)
    entry[wrong] += rng.choice([-1, 1], n_wrong) * rng.uniform(0.05, 0.5, n_wrong)
    level = 22 + rng.normal(0, 0.1, FRAMES)[:, None]
    offset = level - 0.04 * colour + entry + noise * rng.normal(size=(FRAMES, n))
    solved = solve_zero_points(
        offset, np.tile(noise, (FRAMES, 1)), stated, colour, np.ones(FRAMES, bool), None
    )  # fmt: skip
    sigma = np.hypot(stated, noise / np.sqrt(FRAMES))
    must = [int(k) for k in wrong if abs(entry[k]) >= 0.05 and abs(entry[k]) >= 4 * sigma[k]]
    sound = [k for k in range(n) if k not in wrong]
    return [k in solved.set_aside for k in must], [k in solved.set_aside for k in sound]


def test_wrong_entries_are_set_aside_and_sound_ones_are_not() -> None:
    """Two hundred sequences of ten frames each."""
    must, sound = map(list, zip(*(simulated(seed) for seed in range(200)), strict=True))
    caught = np.concatenate(must)
    lost = np.concatenate(sound)
    assert len(caught) > 400
    assert caught.all()
    assert lost.mean() < 0.005  # 3 % would be allowed


def test_errors_that_a_catalogue_understates_cost_few_sound_entries() -> None:
    _, sound = map(list, zip(*(simulated(seed, understated=1.6) for seed in range(100)), strict=True))
    assert np.concatenate(sound).mean() < 0.03


def test_two_wrong_stars_do_not_pass_for_a_colour_term() -> None:
    """A term of half a magnitude would explain them, and no filter has one."""
    colour = np.array([0.3, 0.35, 0.5, 0.6, 0.7, 0.8, 1.25, 1.3])
    entry = np.array([0.002, -0.003, 0.004, 0.0, -0.002, 0.003, 0.45, 0.44])
    offset = 22.0 - 0.04 * colour + entry + np.zeros((FRAMES, 1))
    solved = solve_zero_points(
        offset, np.full((FRAMES, 8), 0.004), np.full(8, 0.006), colour, np.ones(FRAMES, bool), None
    )
    assert set(solved.set_aside) == {6, 7}


def test_a_lost_star_does_not_step_the_zero_point() -> None:
    """One entry is wrong by 0.04 mag, too little to be set aside; half of the frames lack just that bright star."""
    rng = np.random.default_rng(2)
    field = invented_field(rng, 8, error=0.02)
    mag = {band: values.copy() for band, values in field.sequence.mag.items()}
    mag["V"] = field.true_mag["V"].copy()
    brightest = int(np.argmin(mag["V"]))
    mag["V"][brightest] += 0.04
    sequence = replace(field.sequence, mag=mag)
    shots = [
        Shot(f"V{k:02d}", "V", FIRST_MJD + 0.01 * k, dict.fromkeys("BVRI", 14.5),
             lost=(brightest,) if k % 2 else (), noise=False)
        for k in range(12)
    ]  # fmt: skip
    rows = [measure(shot, Field(field.true_mag, sequence), rng) for shot in shots]
    solution = solve_standard(rows, sequence, Choices(), SETTINGS)
    zero_points = np.array([solution.zero_points[shot.name].zp_mag for shot in shots])
    # Each frame alone would step by the star's share of the weight, here more than 10 mmag.
    assert abs(zero_points[::2].mean() - zero_points[1::2].mean()) < 0.001


# ---- the check of a whole campaign -----------------------------------------------------------------------


def observed(
    field: Field, known: Sequence, rng: np.random.Generator, varying: int | None = None, bands: str = "BV"
) -> tuple[list[Measured], SequenceCheck]:
    """Frames of all stars of ``field``, of which ``known`` is the sequence."""
    rows = []
    for k, shot in enumerate(nightly_shots(nights=5, repeats=2, bands=bands)):
        mags = {band: values.copy() for band, values in field.true_mag.items()}
        if varying is not None:
            for values in mags.values():
                values[varying] += 0.06 * np.sin(1.7 * k)
        rows.append(measure(shot, Field(mags, field.sequence), rng))
    solution = solve_standard(rows, known, Choices(), SETTINGS)
    _, nights = make_points(solution, (TARGET,), Choices(), SETTINGS.site)
    stars = mean_stars(frames_by_sequence(rows, solution))
    return rows, check_sequence(solution, known, nights, stars)


def test_constant_stars_of_the_right_colour_are_proposed() -> None:
    rng = np.random.default_rng(21)
    field = invented_field(rng, 36, error=0.005)
    known = chosen(field.sequence, np.arange(16))
    varying = int(np.argmin(np.where(np.arange(36) < 16, 99.0, field.true_mag["V"])))
    _, found = observed(field, known, rng, varying)
    place = {(round(float(ra), 6), round(float(dec), 6)): k for k, (ra, dec) in
             enumerate(zip(field.sequence.ra_deg, field.sequence.dec_deg, strict=True))}  # fmt: skip
    proposed = [place[round(star.ra_deg, 6), round(star.dec_deg, 6)] for star in found.proposed]
    assert len(proposed) >= 4
    assert all(k >= 16 for k in proposed)
    assert varying not in proposed
    low, high = next(band.target_colours for band in found.bands if band.band == "V" and band.target_colours)
    for star, k in zip(found.proposed, proposed, strict=True):
        assert low - 0.35 < star.mag["B"] - star.mag["V"] < high + 0.35
        for band in "BV":
            assert star.mag[band] == pytest.approx(field.true_mag[band][k], abs=0.02)
    errors = [sum(err**2 for err in star.err.values()) for star in found.proposed]
    assert errors == sorted(errors)


def test_scatter_of_the_entries_beyond_their_errors_is_estimated() -> None:
    found = []
    for seed in range(8):
        rng = np.random.default_rng(seed)
        field = invented_field(rng, 30, error=0.004)
        mag = {band: values + 0.010 * rng.normal(size=30) for band, values in field.true_mag.items()}
        _, check = observed(field, replace(field.sequence, mag=mag), rng)
        found += [band.entry_scatter_mag for band in check.bands]
        for band in check.bands:
            # The floor that all magnitudes share follows the scatter, not the stated errors: 28 dof say it to 13 %.
            assert 0.5 < band.floor_mag / (0.010 / np.sqrt(band.n_used)) < 1.5
    assert np.mean(found) == pytest.approx(np.sqrt(0.010**2 - 0.004**2), rel=0.12)


def test_a_target_outside_the_stars_colours_is_said() -> None:
    rng = np.random.default_rng(23)
    field = invented_field(rng, 30, error=0.005)
    bv = field.true_mag["B"] - field.true_mag["V"]
    red = chosen(field.sequence, np.flatnonzero(bv > 0.75))
    _, found = observed(field, red, rng)
    for band in found.bands:
        assert band.star_colours is not None
        assert band.star_colours[0] > 0.7
        assert "bluer in B−V than any comparison star" in band.sentence
    rows = [measure(shot, field, rng) for shot in nightly_shots(nights=4, repeats=2, bands="BV")]
    solution = solve_standard(rows, field.sequence, Choices(), SETTINGS)
    _, nights = make_points(solution, (TARGET,), Choices(), SETTINGS.site)
    redder = [replace(p, mag=p.mag + 0.5 * (p.band == "B")) for p in nights if p.mag is not None]
    within = check_sequence(solution, field.sequence, redder, mean_stars([]))
    assert [band.sentence for band in within.bands] == ["", ""]


def test_colours_come_from_kept_nights_alone() -> None:
    rng = np.random.default_rng(24)
    field = invented_field(rng, 20)
    rows, _ = observed(field, field.sequence, rng)
    solution = solve_standard(rows, field.sequence, Choices(), SETTINGS)
    _, nights = make_points(solution, (TARGET,), Choices(), SETTINGS.site)
    blue, red = target_colours(nights)["B", "V"]
    assert blue == pytest.approx(0.1, abs=0.02)
    assert red == pytest.approx(0.3, abs=0.02)
    assert target_colours([replace(point, state="excluded") for point in nights]) == {}


def test_mean_magnitudes_of_all_stars_are_standard_ones() -> None:
    """In four bands, through colour terms and second-order extinction, within their errors."""
    rng = np.random.default_rng(25)
    field = invented_field(rng, 40, error=0.002)
    rows = [measure(shot, field, rng) for shot in nightly_shots(nights=6, repeats=2)]
    solution = solve_standard(rows, field.sequence, Choices(), SETTINGS)
    stars = mean_stars(frames_by_sequence(rows, solution))
    assert len(stars) == 40
    assert stars.bands == ("B", "V", "R", "I")
    order = [int(np.argmin(np.hypot(field.sequence.ra_deg - ra, field.sequence.dec_deg - dec)))
             for ra, dec in zip(stars.ra_deg, stars.dec_deg, strict=True)]  # fmt: skip
    for band in TERMS:
        pull = (stars.mag[band] - field.true_mag[band][order]) / np.hypot(stars.err[band], 0.001)
        assert np.sqrt(np.nanmean(pull**2)) < 1.5
        assert np.isfinite(pull).all()


def test_a_frame_under_cloud_makes_no_mean_magnitude() -> None:
    """Zero points as a night of standards gives them: they know nothing of the cloud."""
    rng = np.random.default_rng(27)
    field = invented_field(rng, 20)
    shots = [Shot(f"V{k}", "V", FIRST_MJD + 0.01 * k, dict.fromkeys("BVRI", 14.5), transparency_mag=0.08 * (k == 3))
             for k in range(7)]  # fmt: skip
    frames = [
        CalibratedFrame(measure(shot, field, rng), "V", "2023-02-25", 5, 22.684, 0.002, TERMS["V"]) for shot in shots
    ]
    assert sorted(frame.measured.frame for frame in steady(frames)) == ["V0", "V1", "V2", "V4", "V5", "V6"]


def test_nothing_is_proposed_where_nothing_was_measured() -> None:
    field = invented_field(np.random.default_rng(26), 10)
    assert propose_stars(mean_stars([]), field.sequence, {}) == ()
