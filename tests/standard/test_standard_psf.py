"""The PSF as one more way of measuring: when it is chosen, and that it goes through the whole solution."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from synthetic_nights import SETTINGS, TARGET, TERMS, Shot, invented_field, measure, nightly_shots, true_zero_point

from reduce.curve.nights import make_points
from reduce.records import LADDER_FWHM, PSF_COLUMN, Choices, HostLight, HostMethod, Measured, StarFlag
from reduce.standard.aperture import (
    POSITION_ERR_FWHM,
    best_radius,
    nearest_radius,
    position_err_fwhm,
    position_loss_mag,
    radius_fwhm,
)
from reduce.standard.frame_stars import frame_stars
from reduce.standard.solve import solve_standard

SHOTS = nightly_shots(nights=4, repeats=2, bands="V")
FAINT = {"B": 21.0, "V": 20.5, "R": 20.2, "I": 20.0}
WHOLE = LADDER_FWHM.index(4.0)


def with_psf(measured: Measured, gain: float, offset_fwhm: float = 0.1) -> Measured:
    """The same frame with PSF fluxes whose error is that of the best aperture over ``gain``; whole light."""
    stars = measured.stars.copy()
    relative = (stars["flux_err_e"] / stars["flux_e"])[:, : len(LADDER_FWHM)].min(axis=1) / gain
    stars["psf_flux_e"] = stars["flux_e"][:, WHOLE]
    stars["psf_flux_err_e"] = stars["psf_flux_e"] * relative
    stars["psf_dx_px"] = offset_fwhm * measured.quality.fwhm_px
    return replace(measured, stars=stars)


def frames(target_mag: dict[str, float], gain: float | None, offset_fwhm: float = 0.1) -> list:
    rng = np.random.default_rng(4)
    field = invented_field(rng, 30)
    rows = [measure(replace(shot, target_mag=target_mag, noise=False), field, rng) for shot in SHOTS]
    rows = rows if gain is None else [with_psf(row, gain, offset_fwhm) for row in rows]
    return [frame_stars(row, field.sequence, "n") for row in rows]


def test_the_psf_is_chosen_where_it_beats_the_aperture() -> None:
    assert best_radius(frames(FAINT, 1.15)) == PSF_COLUMN
    assert best_radius(frames(FAINT, 0.9)) < len(LADDER_FWHM)
    assert best_radius(frames(FAINT, None)) < len(LADDER_FWHM)


def test_a_bright_target_is_left_to_the_aperture_that_forgives_its_position() -> None:
    bright = SHOTS[0].target_mag
    assert best_radius(frames(bright, 1.1, offset_fwhm=0.1)) < len(LADDER_FWHM)
    assert best_radius(frames(bright, 1.1, offset_fwhm=0.02)) == PSF_COLUMN


def test_how_far_a_target_is_off_is_told_by_its_bright_frames() -> None:
    bright, faint = frames(SHOTS[0].target_mag, 1.1, offset_fwhm=0.05), frames(FAINT, 1.1, offset_fwhm=0.25)
    assert position_err_fwhm([*bright, *faint]) == pytest.approx(0.05)
    assert position_err_fwhm([*bright[:2], *faint]) == POSITION_ERR_FWHM
    assert position_err_fwhm([]) == POSITION_ERR_FWHM


def test_one_frame_in_ten_without_a_psf_leaves_the_choice_to_apertures() -> None:
    with_it, without = frames(FAINT, 1.15), frames(FAINT, None)
    assert best_radius([*with_it[1:], without[0]]) < len(LADDER_FWHM)


@pytest.mark.parametrize("method", ["reference", "mirrored", "bent annulus"])
def test_a_target_without_its_host_is_measured_under_the_psf(method: HostMethod) -> None:
    """Also where lone stars would be measured a little better through an aperture."""
    found = frames(FAINT, 0.9)
    assert best_radius(found) < len(LADDER_FWHM)
    hosts = (HostLight(method, 3.0),)
    assert best_radius([replace(frame, target_host=hosts) for frame in found]) == PSF_COLUMN
    assert best_radius([replace(frame, target_host=(HostLight("annulus", 0.0),)) for frame in found]) < len(LADDER_FWHM)


def test_stars_that_scatter_under_one_way_count_against_it() -> None:
    """The photons alone are for the PSF; 0.1 mag of scatter of the stars under it is not."""
    found = frames(FAINT, 1.05)
    assert best_radius(found) == PSF_COLUMN
    rng = np.random.default_rng(6)
    for frame in found:
        frame.mag[:, PSF_COLUMN] += 0.1 * rng.normal(size=len(frame.mag))
    assert best_radius(found) < len(LADDER_FWHM)


def test_zero_stands_for_the_psf() -> None:
    assert nearest_radius(0.0) == PSF_COLUMN
    assert radius_fwhm(PSF_COLUMN) == 0.0
    for radius in LADDER_FWHM:
        assert radius_fwhm(nearest_radius(radius)) == radius


def test_position_loss_is_that_of_a_displaced_gaussian_under_its_profile() -> None:
    x, y = np.meshgrid(*[np.linspace(-4, 4, 801)] * 2)
    profile, star = (np.exp(-4 * np.log(2) * ((x - d) ** 2 + y**2)) for d in (0.0, 0.1))
    lost = (profile * star).sum() / (profile * profile).sum()
    assert position_loss_mag(0.0) == pytest.approx(-2.5 * np.log10(lost), rel=0.02)


def test_a_flag_of_the_profile_spoils_the_profile_alone() -> None:
    rng = np.random.default_rng(2)
    field = invented_field(rng, 10)
    row = with_psf(measure(SHOTS[0], field, rng), 1.0)
    row.stars["psf_flags"][2] = int(StarFlag.COSMIC_RAY)
    row.stars["flags"][3] = int(StarFlag.COSMIC_RAY)
    stars = frame_stars(row, field.sequence, "n")
    assert np.isnan(stars.mag[2, PSF_COLUMN])
    assert np.isfinite(stars.mag[2, :PSF_COLUMN]).all()
    assert np.isfinite(stars.mag[3, PSF_COLUMN])
    assert np.isnan(stars.mag[3, :PSF_COLUMN]).all()


def test_magnitudes_under_the_psf_are_on_the_standard_system() -> None:
    """Zero points of the frames and magnitudes of the target, from PSF fluxes alone: the apertures hold nonsense."""
    rng = np.random.default_rng(9)
    field = invented_field(rng, 30, error=0.003)
    shots = nightly_shots(nights=6, repeats=2)
    rows = []
    for shot in shots:
        row = with_psf(measure(shot, field, rng), 1.0)
        row.stars["flux_e"] *= rng.uniform(0.5, 2.0, row.stars["flux_e"].shape)
        rows.append(row)
    choices = Choices(aperture_fwhm=dict.fromkeys("BVRI", 0.0))
    solution = solve_standard(rows, field.sequence, choices, SETTINGS)
    assert {zp.aperture_fwhm for zp in solution.zero_points.values()} == {0.0}
    off = [solution.zero_points[shot.name].zp_mag - true_zero_point(shot) for shot in shots]
    assert np.abs(off).max() < 0.01
    assert {term.band: term.term for term in solution.colour_terms} == pytest.approx(TERMS, abs=0.01)
    points, _ = make_points(solution, (TARGET,), choices, SETTINGS.site)
    true = {shot.name: shot for shot in shots}
    pulls = [(p.mag - _true_mag(true[p.file])) / p.err for p in points if p.file in true and p.mag is not None]
    assert len(pulls) == len(shots)
    assert np.sqrt(np.mean(np.square(pulls))) < 1.5


def _true_mag(shot: Shot) -> float:
    return shot.target_mag[shot.band]
