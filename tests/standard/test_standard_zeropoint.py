"""The joint solution against simulated frames × stars whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from reduce.standard.zeropoint import JointSolution, solve_zero_points


class Set:
    """Frames × stars of one camera and band."""

    def __init__(self, seed: int, frames: int = 20, stars: int = 25, catalogue_err: float = 0.01, term: float = 0.06):
        rng = np.random.default_rng(seed)
        self.term = term
        self.zp = 22.0 + rng.normal(0, 0.1, frames)
        self.colour = rng.uniform(0.3, 1.3, stars)
        self.catalogue_err = np.full(stars, catalogue_err)
        self.err = np.broadcast_to(rng.uniform(0.003, 0.02, stars), (frames, stars)).copy()
        self.delta = self.catalogue_err * rng.normal(size=stars)
        noise = self.err * rng.normal(size=self.err.shape)
        self.offset = self.zp[:, None] + term * self.colour - self.delta + noise

    def solve(self, **changes: object) -> JointSolution:
        values: dict[str, object] = {
            "offset": self.offset,
            "err": self.err,
            "catalogue_err": self.catalogue_err,
            "colour": self.colour,
            "informs": np.ones(len(self.zp), bool),
        }
        return solve_zero_points(**(values | changes))  # type: ignore[arg-type]


def test_pulls_of_frames_sequence_and_term_are_one() -> None:
    own, shared, term = [], [], []
    for seed in range(80):
        made = Set(seed)
        got = made.solve()
        error = got.zp_mag + got.term * got.pivot_colour - made.zp - made.term * got.pivot_colour
        own += list((error - error.mean()) / got.zp_err_mag * np.sqrt(20 / 19))
        shared.append(error.mean() / np.hypot(got.sequence_err_mag, np.mean(got.zp_err_mag) / np.sqrt(20)))
        term.append((got.term - made.term) / got.term_err)
    assert 0.9 < np.std(own) < 1.1
    assert 0.8 < np.std(shared) < 1.2  # 80 draws: 1 ± 0.08
    assert 0.8 < np.std(term) < 1.2
    assert abs(np.mean(shared)) < 0.35
    assert abs(np.mean(term)) < 0.35


def test_agrees_with_dense_least_squares() -> None:
    made = Set(3, frames=5, stars=8, catalogue_err=0.02)
    made.offset[1, 2] = np.nan
    got = made.solve()
    rows, right = [], []
    for f in range(5):
        for s in range(8):
            if np.isfinite(made.offset[f, s]):
                row = np.zeros(5 + 8 + 1)
                row[f], row[5 + s], row[-1] = 1, -1, made.colour[s]
                rows.append(row / made.err[f, s])
                right.append(made.offset[f, s] / made.err[f, s])
    for s in range(8):
        row = np.zeros(14)
        row[5 + s] = 1 / made.catalogue_err[s]
        rows.append(row)
        right.append(0.0)
    answer = np.linalg.lstsq(np.array(rows), np.array(right), rcond=None)[0]
    assert not got.set_aside
    assert got.used.sum() == 39
    np.testing.assert_allclose(got.zp_mag, answer[:5], atol=1e-9)
    assert got.term == pytest.approx(answer[-1], abs=1e-9)
    covariance = np.linalg.inv(np.array(rows).T @ np.array(rows))
    assert got.term_err == pytest.approx(covariance[-1, -1] ** 0.5, rel=1e-9)
    # The whole variance of zero point + T · pivot, averaged over frames of one star set, splits without rest.
    gradient = np.zeros(14)
    gradient[0], gradient[-1] = 1, got.pivot_colour
    whole = gradient @ covariance @ gradient
    assert np.hypot(got.zp_err_mag[0], got.sequence_err_mag) ** 2 == pytest.approx(whole, rel=0.35)


def test_a_lost_star_does_not_step_the_zero_point() -> None:
    steps = []
    for seed in range(30):
        made = Set(seed, frames=30, stars=6, catalogue_err=0.03, term=0.0)
        full = made.solve(term=0.0)
        made.offset[15:, int(np.argmin(made.err[0]))] = np.nan
        lost = made.solve(term=0.0)
        steps.append((lost.zp_mag - full.zp_mag)[15:].mean() - (lost.zp_mag - full.zp_mag)[:15].mean())
    # The best star is wrong by 30 mmag on average: averaging only the stars present would step by ~8 mmag.
    assert np.std(steps) < 0.002


@pytest.mark.parametrize("wrong_mag", [-0.3, 0.08, 2.0])
def test_wrong_catalogue_entries_are_found_and_only_these(wrong_mag: float) -> None:
    for seed in range(20):
        made = Set(seed, frames=6)
        made.offset[:, 4] += wrong_mag
        made.offset[:, 9] -= wrong_mag
        got = made.solve()
        assert set(got.set_aside) == {4, 9}
        assert ("brighter" if wrong_mag > 0 else "fainter") in got.set_aside[4]
        assert np.abs(got.zp_mag + 0.8 * got.term - made.zp - 0.8 * made.term).max() < 0.02
        assert abs(got.star_offset_mag[4] + wrong_mag) < 0.06


def test_a_single_frame_finds_a_wrong_entry() -> None:
    made = Set(5, frames=1)
    made.offset[:, 4] += 0.5
    assert set(made.solve().set_aside) == {4}


def test_a_variable_star_is_set_aside() -> None:
    made = Set(1)
    made.offset[:, 7] += 0.15 * np.random.default_rng(0).normal(size=20)
    got = made.solve()
    assert "varies" in got.set_aside[7]


def test_an_outlying_measurement_is_rejected_alone() -> None:
    made = Set(2)
    made.offset[3, 5] -= 0.5
    got = made.solve()
    assert not got.used[3, 5]
    assert got.used.sum() >= made.offset.size - 4
    assert abs(got.zp_mag[3] + 0.8 * got.term - made.zp[3] - 0.8 * made.term) < 0.01


def test_a_patchy_frame_has_a_wide_error_and_spoils_nobody() -> None:
    clean, made = Set(4), Set(4)
    made.offset[6] -= 0.4 * np.random.default_rng(1).uniform(size=25)
    before, after = clean.solve(), made.solve()
    others = np.arange(20) != 6
    assert np.abs(after.zp_mag - before.zp_mag)[others].max() < 0.002
    assert after.zp_err_mag[6] > 5 * before.zp_err_mag[6]
    assert after.rms_mag[6] > 0.08
    assert after.chi2_dof[6] > 20


def test_frames_that_do_not_inform_change_nothing_else() -> None:
    made = Set(8)
    informs = np.arange(20) < 15
    part = made.solve(informs=informs)
    made.offset[15:] += 0.7
    again = made.solve(informs=informs)
    np.testing.assert_allclose(again.zp_mag[:15], part.zp_mag[:15], atol=1e-12)
    np.testing.assert_allclose(again.zp_mag[15:], part.zp_mag[15:] + 0.7, atol=1e-9)


def test_extra_scatter_of_a_star_is_found() -> None:
    made = Set(6, frames=60)
    made.offset[:, 3] += 0.03 * np.random.default_rng(2).normal(size=60)
    got = made.solve()
    assert got.star_scatter_mag[3] == pytest.approx(0.03, rel=0.35)
    assert np.median(got.star_scatter_mag) < 0.002


def test_frame_without_stars_has_no_zero_point() -> None:
    made = Set(7)
    made.offset[2] = np.nan
    got = made.solve()
    assert np.isnan(got.zp_mag[2])
    assert got.n_stars[2] == 0
    assert np.isfinite(np.delete(got.zp_mag, 2)).all()


@settings(max_examples=25, deadline=None)
@given(shift=st.floats(-3, 3), seed=st.integers(0, 1000))
def test_adding_a_constant_moves_the_zero_points_only(shift: float, seed: int) -> None:
    made = Set(seed, frames=6, stars=8)
    plain = made.solve()
    made.offset = made.offset + shift
    moved = made.solve()
    np.testing.assert_allclose(moved.zp_mag, plain.zp_mag + shift, atol=1e-8)
    assert moved.term == pytest.approx(plain.term, abs=1e-8)
    np.testing.assert_array_equal(moved.used, plain.used)


def test_an_uncertain_adopted_term_accuses_no_star() -> None:
    for seed in range(30):
        made = Set(seed, frames=6, stars=5, term=0.1)
        assert not made.solve(term=0.0, term_err=0.05).set_aside


def test_understated_catalogue_errors_widen_the_sequence_error() -> None:
    honest = np.mean([Set(seed).solve().sequence_err_mag for seed in range(20)])
    understated = np.mean([Set(seed).solve(catalogue_err=np.full(25, 0.003)).sequence_err_mag for seed in range(20)])
    assert understated > 0.7 * honest


def test_one_frame_is_the_textbook_weighted_mean() -> None:
    made = Set(21, frames=1, stars=12)
    got = made.solve(term=made.term)
    variance = made.err[0] ** 2 + made.catalogue_err**2
    z = made.offset[0] - made.term * made.colour
    mean = np.average(z, weights=1 / variance)
    chi2 = np.sum((z - mean) ** 2 / variance)
    assert not got.set_aside
    assert got.zp_mag[0] == pytest.approx(mean, abs=1e-9)
    assert got.chi2_dof[0] == pytest.approx(chi2 / 11, rel=1e-6)
    scale = max(1.0, chi2 / 11)
    own = scale / np.sum(1 / made.err[0] ** 2)
    assert got.zp_err_mag[0] ** 2 == pytest.approx(own, rel=1e-6)
    whole = got.zp_err_mag[0] ** 2 + got.sequence_err_mag**2
    assert whole >= (1 - 1e-9) / np.sum(1 / variance)


def test_understated_photon_errors_are_scaled_by_chi2() -> None:
    rng = np.random.default_rng(5)
    err = np.full(20, 0.01)
    z = 22.0 + 1.4 * err * rng.normal(size=20)
    got = solve_zero_points(z[None], err[None], np.zeros(20), np.zeros(20), np.ones(1, bool), term=0.0)
    chi2_dof = np.sum(((z - z.mean()) / err) ** 2) / 19
    assert 1.3 < chi2_dof < 1.9  # scaled, and too little to be called patchy
    assert got.zp_err_mag[0] == pytest.approx(0.01 / 20**0.5 * chi2_dof**0.5, rel=1e-3)


def test_a_frame_s_zero_point_is_as_good_as_its_photons_allow() -> None:
    ratio, stated = [], []
    for seed in range(40):
        made = Set(seed, frames=40, stars=20, term=0.0)
        got = made.solve(term=0.0)
        allowed = 1 / np.sqrt(np.sum(made.err**-2.0, axis=1))
        error = got.zp_mag - made.zp
        ratio += list((error - error.mean()) / allowed * np.sqrt(40 / 39))
        stated += list(got.zp_err_mag / allowed)
    # 1600 frames: 1 within 0.018 by chance.
    assert np.sqrt(np.mean(np.square(ratio))) < 1.05
    assert 1.0 <= np.mean(stated) < 1.08
