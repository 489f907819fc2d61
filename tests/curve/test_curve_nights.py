"""Points of invented nights against their truth."""

from __future__ import annotations

import json
from dataclasses import asdict, replace

import numpy as np
import pytest
from synthetic_nights import (
    FIRST_MJD,
    SETTINGS,
    SITE,
    TARGET,
    Field,
    Shot,
    invented_field,
    measure,
    nightly_shots,
)

from reduce.curve.light_curve import to_light_curve
from reduce.curve.nights import make_points
from reduce.curve.visits import shots_of
from reduce.records import Choices, Measured, Point, StarFlag, Target
from reduce.standard.solve import solve_standard

BANDS = "BVRI"
SHOTS = nightly_shots()


def made(seed: int, shots: list[Shot] = SHOTS, **field: float) -> tuple[Field, list[Measured]]:
    rng = np.random.default_rng(seed)
    stars = invented_field(rng, 40, **field)  # type: ignore[arg-type]
    return stars, [measure(shot, stars, rng) for shot in shots]


def points(
    field: Field, measured: list[Measured], choices: Choices | None = None, target: Target = TARGET
) -> tuple[tuple[Point, ...], tuple[Point, ...]]:
    choices = choices or Choices()
    solution = solve_standard(measured, field.sequence, choices, SETTINGS)
    return make_points(solution, [target], choices, SITE)


def truth(point: Point, shots: list[Shot] = SHOTS) -> float:
    nearest = min(shots, key=lambda shot: abs(shot.mjd - point.mjd) if shot.band == point.band else 1e9)
    return nearest.target_mag[point.band]


def test_night_points_are_unbiased_and_their_errors_honest() -> None:
    pulls: dict[str, list[float]] = {band: [] for band in BANDS}
    offsets = []
    for seed in range(12):
        field, measured = made(seed)
        _, nights = points(field, measured)
        assert len(nights) == 12 * 4
        for band in BANDS:
            mine = [point for point in nights if point.band == band]
            residual = np.array([point.mag - truth(point) for point in mine])
            err = np.array([np.hypot(point.err, point.err_night) for point in mine])
            pulls[band] += list((residual - residual.mean()) / err * np.sqrt(12 / 11))
            offsets.append(residual.mean() / mine[0].err_band)
            assert abs(residual.mean()) < 0.012
    for band in BANDS:
        assert 0.8 < np.std(pulls[band]) < 1.2, band
    assert np.abs(offsets).max() < 1  # err_band has 0.02 mag for a spectrum that is no star's: none here


def test_without_noise_the_standard_magnitudes_come_back() -> None:
    shots = [replace(shot, noise=False) for shot in SHOTS]
    field, measured = made(0, shots, error=1e-4)
    frames, nights = points(field, measured)
    assert {point.state for point in frames + nights} == {"kept"}
    for point in (*frames, *nights):
        assert point.mag == pytest.approx(truth(point), abs=5e-4)


def test_flux_and_magnitude_agree_and_times_are_the_points_own() -> None:
    field, measured = made(1)
    frames, nights = points(field, measured)
    for point in (*frames, *nights):
        assert point.mag == pytest.approx(25 - 2.5 * np.log10(point.flux), abs=1e-9)
        assert point.err == pytest.approx(2.5 / np.log(10) * point.flux_err / point.flux, rel=1e-9)
        assert point.bjd_tdb is not None
        assert abs(point.bjd_tdb - 2400000.5 - point.mjd) < 0.01
        assert point.zp_group == f"cam/{point.band}/{point.night}"
    assert all(point.n_frames == 3 for point in nights)
    assert len(frames) == len(SHOTS)


def test_unknown_colour_is_never_invented() -> None:
    shots = [shot for shot in SHOTS if shot.band == "B"]
    field, measured = made(2, shots)
    _, nights = points(field, measured)
    _, known = points(*made(2))
    assert all("colour unknown" in point.flags for point in nights)
    assert not any("colour unknown" in point.flags for point in known)
    # The coefficient of B is ~0.12; half a magnitude of unknown colour.
    assert all(0.05 < point.err_band < 0.08 for point in nights)
    residual = np.array([point.mag - truth(point) for point in nights])
    assert np.abs(residual).max() < 2 * nights[0].err_band
    assert all(point.natural_mag is not None for point in nights)


def test_colour_is_interpolated_between_nights_but_not_far() -> None:
    gap = [s for s in SHOTS if s.band == "B" or (s.band == "V" and s.name[1:3] not in ("05", "08", "09", "10", "11"))]
    field, measured = made(3, gap)
    _, nights = points(field, measured)
    colourless = {int(p.mjd - FIRST_MJD + 0.5) for p in nights if p.band == "B" and "colour unknown" in p.flags}
    assert colourless == {9, 10, 11}
    (fifth,) = [p for p in nights if p.band == "B" and int(p.mjd - FIRST_MJD + 0.5) == 5]
    assert abs(fifth.mag - truth(fifth)) < 0.02


def test_doubtful_frames_wait_behind_kept_ones() -> None:
    field, measured = made(4)
    names = {row.frame: k for k, row in enumerate(measured)}
    measured[names["V030"]].stars["flags"][-1] = int(StarFlag.COSMIC_RAY)
    for k in range(3):
        measured[names[f"R05{k}"]].stars["flags"][-1] = int(StarFlag.BAD_PIXEL)
    measured[names["I020"]].stars["flags"][-1] = int(StarFlag.SATURATED)
    frames, nights = points(field, measured)
    state = {point.file: (point.state, point.flags) for point in frames}
    assert state["V030"] == ("doubtful", ("cosmic ray",))
    assert state["I020"] == ("dropped", ("saturated",))
    by = {(point.band, int(point.mjd - FIRST_MJD + 0.5)): point for point in nights}
    assert (by["V", 3].state, by["V", 3].n_frames) == ("kept", 2)
    assert (by["I", 2].state, by["I", 2].n_frames) == ("kept", 2)
    assert (by["R", 5].state, by["R", 5].n_frames) == ("doubtful", 3)
    assert len(to_light_curve(nights)) == 47


def test_dropped_by_a_person_and_excluded() -> None:
    field, measured = made(5)
    _, before = points(field, measured)
    night = before[0].night
    choices = Choices(
        excluded_points=frozenset({(TARGET.name, night, "V")}),
        frame_states={f"B04{k}": "dropped" for k in range(3)},
    )
    frames, after = points(field, measured, choices)
    assert len(after) == len(before) - 1
    excluded = [point for point in after if point.state == "excluded"]
    assert [(point.night, point.band) for point in excluded] == [(night, "V")]
    assert excluded[0].mag is not None
    assert sum(point.state == "excluded" for point in frames) == 3
    assert len(to_light_curve(after)) == len(before) - 2


def test_faint_target_is_a_limit_with_flux() -> None:
    mags = {"B": 24.5, "V": 24.5, "R": 24.0, "I": 24.0}
    shots = [replace(shot, target_mag=mags) for shot in SHOTS]
    field, measured = made(6, shots)
    _, nights = points(field, measured)
    limits = [point for point in nights if point.state == "limit"]
    assert {point.state for point in nights} <= {"limit", "kept"}
    assert len(limits) > 0.8 * len(nights)
    assert all(point.mag is None and point.err is None and point.flux_err > 0 for point in limits)
    true_flux = 10 ** (-0.4 * (24.5 - 25))
    pull = np.array([(p.flux - true_flux) / p.flux_err for p in nights if p.band in "BV"])
    assert 0.6 < np.std(pull) < 1.4  # 24 nights; colour unknown changes fluxes by a few per cent only
    assert abs(pull.mean()) < 0.7
    curve = to_light_curve(nights)
    assert np.isnan(curve.mag[[point.state == "limit" for point in nights]]).all()
    assert np.isfinite(curve.flux).all()


def test_a_shot_knows_its_own_photons() -> None:
    field, measured = made(1, SHOTS[:12])
    solution = solve_standard(measured, field.sequence, Choices(), SETTINGS)
    for shot in shots_of(solution):
        electrons = shot.frame.stars.target_flux_e[0, shot.system.radius]
        assert shot.flux * shot.photons_per_flux == pytest.approx(electrons, rel=1e-12)
        assert shot.flux_err * shot.photons_per_flux > electrons**0.5


def test_short_periods_are_not_averaged() -> None:
    field, measured = made(7, nightly_shots(2, 3))
    _, nights = points(field, measured, target=replace(TARGET, kind="rr_lyrae"))
    assert {point.n_frames for point in nights} == {1}
    assert len(nights) == 24


def test_two_cameras_make_two_points_with_their_own_terms() -> None:
    shots = [replace(shot, camera="a" if int(shot.name[-1]) else "b") for shot in SHOTS]
    field, measured = made(8, shots)
    _, nights = points(field, measured)
    assert len(nights) == 2 * 48
    assert len({point.zp_group for point in nights}) == 96
    assert set(to_light_curve(nights).night) == {point.zp_group for point in nights}


def test_other_names_and_empty_input() -> None:
    field, measured = made(9, SHOTS[:12])
    assert points(field, measured, target=replace(TARGET, name="Somebody else")) == ((), ())
    assert points(field, []) == ((), ())
    assert len(to_light_curve([])) == 0


def test_order_of_frames_does_not_matter_to_the_last_bit() -> None:
    field, measured = made(10)
    one = points(field, measured)
    other = points(field, measured[::-1])
    assert json.dumps([asdict(p) for p in one[0] + one[1]]) == json.dumps([asdict(p) for p in other[0] + other[1]])


def test_absurd_target_fluxes_make_no_point() -> None:
    field, measured = made(11, SHOTS[:24])
    for k, spoil in enumerate((np.nan, np.inf, -np.inf)):
        measured[k].stars["flux_e"][-1] = spoil
    measured[3].stars["flux_err_e"][-1] = 0.0
    measured[4].stars["flux_e"][-1] = -50.0
    frames, nights = points(field, measured)
    assert len(frames) == 20
    assert all(np.isfinite(point.flux) and point.flux_err > 0 for point in (*frames, *nights))
    assert {point.file: point.state for point in frames}[measured[4].frame] == "limit"


def test_scatter_of_single_stars_enters_the_independent_error() -> None:
    shots = [replace(shot, flat_scatter_mag=0.012) for shot in SHOTS]
    pulls = []
    for seed in range(6):
        field, measured = made(seed, shots)
        frames, _ = points(field, measured)
        residual = np.array([point.mag - truth(point) for point in frames if point.band == "V"])
        err = np.array([point.err for point in frames if point.band == "V"])
        assert err.min() > 0.011
        pulls += list((residual - residual.mean()) / err)
    assert 0.88 < np.std(pulls) < 1.12  # 216 draws


def test_zero_points_of_a_night_average_and_the_colour_adds_its_noise() -> None:
    field, measured = made(12)
    frames, nights = points(field, measured)
    solution = solve_standard(measured, field.sequence, Choices(), SETTINGS)
    (blue,) = [system for system in solution.systems if system.band == "B"]
    own = blue.frames[0].zp_err_mag
    night = next(point for point in nights if point.band == "B")
    frame = next(point for point in frames if point.band == "B")
    partner = next(point for point in nights if point.band == "V")
    colour_noise = abs(blue.frames[0].coefficient) * np.hypot(night.err, partner.err)
    rest = blue.night_scatter_mag**2 + blue.position_loss_mag**2 + colour_noise**2
    assert frame.err_night**2 == pytest.approx(own**2 + rest, rel=0.05)
    assert night.err_night**2 == pytest.approx(own**2 / 3 + rest, rel=0.05)


def test_a_colour_far_from_the_comparison_stars_widens_err_band() -> None:
    mags = {"B": 14.0, "V": 14.5, "R": 14.6, "I": 14.7}
    far = [replace(shot, target_mag=mags) for shot in SHOTS]
    field, measured = made(13, far)
    _, nights = points(field, measured)
    solution = solve_standard(measured, field.sequence, Choices(), SETTINGS)
    for system in solution.systems:
        point = next(point for point in nights if point.band == system.band)
        colour = {"B": -0.5, "V": -0.5, "R": -0.1, "I": -0.2}[system.band]
        term = system.term.term_err * (colour - system.term.colour_mean)
        assert point.err_band == pytest.approx((0.01**2 + 0.02**2 + term**2) ** 0.5, rel=0.02)


def test_points_say_how_the_light_of_the_host_was_taken_off() -> None:
    field, measured = made(1, SHOTS[:8])
    on_host = replace(TARGET, host_ra_deg=TARGET.ra_deg + 0.004, host_dec_deg=TARGET.dec_deg)
    for target, method in ((TARGET, "annulus"), (on_host, "bent annulus")):
        frames, nights = points(field, measured, target=target)
        assert {point.host_method for point in (*frames, *nights)} == {method}
