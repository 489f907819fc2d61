"""From measured frames to verdicts and zero points, on invented nights with known truth."""

from __future__ import annotations

import json
import time
from dataclasses import asdict, replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from synthetic_nights import (
    FIRST_MJD,
    SETTINGS,
    SITE,
    TERMS,
    Shot,
    invented_field,
    measure,
    nightly_shots,
    true_zero_point,
    with_quality,
)

from reduce.records import PSF_COLUMN, Choices, Measured, StarFlag
from reduce.settings import Photometry, Settings
from reduce.standard.aperture import best_radius, position_loss_mag
from reduce.standard.frame_stars import frame_stars
from reduce.standard.scatter import repeatability
from reduce.standard.solve import StandardSolution, solve_standard

SHOTS = nightly_shots(nights=8, repeats=2)


@pytest.fixture(scope="module")
def nights() -> tuple[list[Measured], StandardSolution]:
    rng = np.random.default_rng(11)
    field = invented_field(rng, 40)
    measured = [measure(shot, field, rng) for shot in SHOTS]
    return measured, solve_standard(measured, field.sequence, Choices(), SETTINGS)


def text(solution: StandardSolution) -> str:
    return json.dumps([
        [asdict(solution.zero_points[key]) for key in sorted(solution.zero_points)],
        [asdict(term) for term in solution.colour_terms],
        [asdict(star) for star in solution.stars],
        [asdict(solution.verdicts[key]) for key in sorted(solution.verdicts)],
    ])  # fmt: skip


def test_everything_is_recovered(nights: tuple[list[Measured], StandardSolution]) -> None:
    _, solution = nights
    assert {verdict.state for verdict in solution.verdicts.values()} == {"kept"}
    assert {star.word for star in solution.stars} == {"used"}
    for system in solution.systems:
        term = system.term
        assert term.fitted
        assert abs(term.term - TERMS[system.band]) < 4 * term.term_err
        assert term.term_err < 0.015
        truth = {shot.name: true_zero_point(shot) for shot in SHOTS}
        at_pivot = [
            frame.zp_mag + (term.term - TERMS[system.band]) * term.colour_mean - truth[frame.stars.frame]
            for frame in system.frames
        ]
        assert abs(np.mean(at_pivot)) < 4 * system.sequence_err_mag
        assert system.sequence_err_mag < 0.003
        own = np.mean([frame.zp_err_mag for frame in system.frames])
        assert np.std(at_pivot) < 1.6 * own


def test_second_order_extinction_is_taken_off() -> None:
    rng = np.random.default_rng(3)
    field = invented_field(rng, 40, error=0.001)
    mags = {"B": 15.0, "V": 14.5, "R": 14.2, "I": 14.0}
    shots = [Shot(f"B{k}", "B", FIRST_MJD + 0.01 * k, mags, airmass=1.0 + 0.3 * k, noise=False) for k in range(5)]
    measured = [measure(shot, field, rng) for shot in shots]
    slopes = {}
    for k2 in (-0.03, 0.0):
        setting = Settings(site=SITE, photometry=Photometry(second_order_extinction={"B": k2}))
        solution = solve_standard(measured, field.sequence, Choices(), setting)
        slopes[k2] = [solution.zero_points[shot.name].slope_diagnostic for shot in shots]
        if k2:
            assert solution.colour_terms[0].term == pytest.approx(TERMS["B"], abs=0.003)
            assert any("extinction 0.30" in note for note in solution.notes)
    assert np.ptp(slopes[-0.03]) < 1e-3
    assert np.ptp(slopes[0.0]) == pytest.approx(0.03 * 1.2, rel=0.1)


def test_order_of_frames_does_not_matter_to_the_last_bit(
    nights: tuple[list[Measured], StandardSolution],
) -> None:
    measured, solution = nights
    field = invented_field(np.random.default_rng(11), 40)

    @settings(max_examples=5, deadline=None)
    @given(st.permutations(range(len(measured))))
    def check(order: list[int]) -> None:
        again = solve_standard([measured[k] for k in order], field.sequence, Choices(), SETTINGS)
        assert text(again) == text(solution)

    check()


def test_star_that_a_person_set_aside_does_not_take_part(
    nights: tuple[list[Measured], StandardSolution],
) -> None:
    measured, _ = nights
    field = invented_field(np.random.default_rng(11), 40)
    solution = solve_standard(measured, field.sequence, Choices(stars_set_aside=frozenset({"s03"})), SETTINGS)
    rows = [star for star in solution.stars if star.star == "s03"]
    assert {star.word for star in rows} == {"set aside"}
    assert all("person" in star.reason for star in rows)
    assert all(np.isfinite(star.residual_mag) for star in rows)


def test_wrong_catalogue_entry_is_named(nights: tuple[list[Measured], StandardSolution]) -> None:
    measured, clean = nights
    sequence = invented_field(np.random.default_rng(11), 40).sequence
    wrong = sequence.mag["R"].copy()
    wrong[5] += 0.2
    solution = solve_standard(measured, replace(sequence, mag={**sequence.mag, "R": wrong}), Choices(), SETTINGS)
    aside = [star for star in solution.stars if star.word == "set aside"]
    assert [(star.star, star.band) for star in aside] == [("s05", "R")]
    assert "brighter" in aside[0].reason
    name = next(shot.name for shot in SHOTS if shot.band == "R")
    assert abs(solution.zero_points[name].zp_mag - clean.zero_points[name].zp_mag) < 0.003


def test_narrow_colours_adopt_the_term_of_the_settings() -> None:
    rng = np.random.default_rng(5)
    field = invented_field(rng, 5)
    setting = Settings(site=SITE, photometry=Photometry(colour_terms={"V": -0.04}))
    solution = solve_standard([measure(SHOTS[1], field, rng)], field.sequence, Choices(), setting)
    (term,) = solution.colour_terms
    assert not term.fitted
    assert (term.term, term.term_err) == (-0.04, 0.05)


def test_sequence_of_one_band_has_no_colour_term() -> None:
    rng = np.random.default_rng(6)
    field = invented_field(rng, 20, bands="V")
    solution = solve_standard([measure(SHOTS[1], field, rng)], field.sequence, Choices(), SETTINGS)
    (term,) = solution.colour_terms
    assert term.term == 0
    assert np.isnan(term.colour_mean)
    assert solution.zero_points[SHOTS[1].name].n_stars == 20


def test_band_that_the_sequence_lacks_drops_the_frame_with_a_reason() -> None:
    rng = np.random.default_rng(6)
    field = invented_field(rng, 20, bands="V")
    solution = solve_standard([measure(SHOTS[0], field, rng)], field.sequence, Choices(), SETTINGS)
    verdict = solution.verdicts[SHOTS[0].name]
    assert verdict.state == "dropped"
    assert verdict.reasons == ("no comparison star with a B magnitude could be used",)
    assert not solution.zero_points


def test_no_frames_and_no_stars() -> None:
    field = invented_field(np.random.default_rng(1), 3)
    assert solve_standard([], field.sequence, Choices(), SETTINGS).systems == ()
    none = invented_field(np.random.default_rng(1), 0)
    measured = [measure(SHOTS[1], none, np.random.default_rng(1))]
    assert solve_standard(measured, none.sequence, Choices(), SETTINGS).verdicts[SHOTS[1].name].state == "dropped"


def faulty(measured: list[Measured], *others: Measured) -> list[Measured]:
    names = {other.frame for other in others}
    return [row for row in measured if row.frame not in names] + list(others)


def test_verdicts_of_bad_frames(nights: tuple[list[Measured], StandardSolution]) -> None:
    measured, clean = nights
    rng = np.random.default_rng(9)
    field = invented_field(np.random.default_rng(11), 40)
    by_band = [shot for shot in SHOTS if shot.band == "V"]
    bad = {
        "thin cloud": measure(replace(by_band[0], transparency_mag=0.6), field, rng),
        "overcast": measure(replace(by_band[1], transparency_mag=1.5), field, rng),
        "patchy": measure(replace(by_band[2], patchy_mag=0.5), field, rng),
        "trailed": with_quality(measure(by_band[3], field, rng), elongation=1.8, trail_agreement=0.95),
        "torn": with_quality(measure(by_band[4], field, rng), elongation=4.0, trail_agreement=0.95),
        "elongated at random": with_quality(measure(by_band[5], field, rng), elongation=1.8, trail_agreement=0.2),
        "wide": with_quality(measure(by_band[6], field, rng), fwhm_px=7.0),
        "no flat": with_quality(measure(by_band[7], field, rng), flat_used=False),
        "twilight": with_quality(measure(by_band[8], field, rng), sun_altitude_deg=-6.0),
        "few": measure(replace(by_band[9], lost=tuple(range(36))), field, rng),
        "too few": measure(replace(by_band[10], lost=tuple(range(38))), field, rng),
        "no match": replace(measured[0], frame="other", outcome="no match", reason="the field was not recognised."),
    }
    solution = solve_standard(faulty(measured, *bad.values()), field.sequence, Choices(), SETTINGS)
    states = {name: solution.verdicts[row.frame].state for name, row in bad.items()}
    assert states == {
        "thin cloud": "doubtful", "overcast": "dropped", "patchy": "dropped", "trailed": "doubtful",
        "torn": "dropped", "elongated at random": "kept", "wide": "doubtful", "no flat": "doubtful",
        "twilight": "doubtful", "few": "doubtful", "too few": "dropped", "no match": "dropped",
    }  # fmt: skip
    assert solution.verdicts[bad["overcast"].frame].reasons[0].startswith("cloud: ")
    assert solution.verdicts["other"].reasons == ("the field was not recognised.",)
    untouched = [shot.name for shot in SHOTS if shot.name not in {row.frame for row in bad.values()}]
    assert {solution.verdicts[name].state for name in untouched} == {"kept"}
    change = [solution.zero_points[name].zp_mag - clean.zero_points[name].zp_mag for name in untouched]
    assert np.abs(change).max() < 0.003


def test_a_person_stands_above_the_rules(nights: tuple[list[Measured], StandardSolution]) -> None:
    measured, _ = nights
    field = invented_field(np.random.default_rng(11), 40)
    torn = with_quality(measured[1], elongation=4.0, trail_agreement=0.95)
    choices = Choices(frame_states={torn.frame: "kept", measured[2].frame: "dropped"})
    solution = solve_standard(faulty(measured, torn), field.sequence, choices, SETTINGS)
    assert solution.verdicts[torn.frame].state == "kept"
    assert solution.verdicts[torn.frame].by_person
    assert solution.verdicts[torn.frame].reasons
    assert solution.verdicts[measured[2].frame].state == "dropped"


def test_spoiled_and_saturated_stars_stay_out() -> None:
    rng = np.random.default_rng(2)
    field = invented_field(rng, 10)
    measured = measure(SHOTS[1], field, rng)
    measured.stars["flags"][2] = int(StarFlag.SATURATED)
    measured.stars["flags"][3] = int(StarFlag.COSMIC_RAY)
    measured.stars["flags"][4] = int(StarFlag.CROWDED)
    stars = frame_stars(measured, field.sequence, "night")
    assert np.isnan(stars.mag[[2, 3]]).all()
    assert np.isfinite(stars.mag[4, :PSF_COLUMN]).all()
    assert np.isnan(stars.mag[4, PSF_COLUMN]), "error 0: not measured"
    solution = solve_standard([measured], field.sequence, Choices(), SETTINGS)
    words = {star.star: (star.word, star.reason) for star in solution.stars}
    assert words["s02"] == ("spare", "saturated")
    assert words["s03"][0] == "spare"


def test_two_sequence_stars_never_share_one_measurement() -> None:
    rng = np.random.default_rng(2)
    field = invented_field(rng, 10)
    sequence = field.sequence
    ra, dec = sequence.ra_deg.copy(), sequence.dec_deg.copy()
    ra[7], dec[7] = ra[2], dec[2] + 0.6 / 3600
    measured = measure(replace(SHOTS[1], lost=(7,)), field, rng)
    stars = frame_stars(measured, replace(sequence, ra_deg=ra, dec_deg=dec), "night")
    assert np.isfinite(stars.mag[2, :PSF_COLUMN]).all()
    assert np.isnan(stars.mag[7]).all()


def test_aperture_follows_signal_to_noise_and_choices(
    nights: tuple[list[Measured], StandardSolution],
) -> None:
    measured, solution = nights
    field = invented_field(np.random.default_rng(11), 40)
    faint = {"B": 21.0, "V": 20.5, "R": 20.2, "I": 20.0}
    rng = np.random.default_rng(4)
    dim = [
        frame_stars(measure(replace(shot, target_mag=faint, noise=False), field, rng), field.sequence, "n")
        for shot in SHOTS[:8]
    ]
    bright = [frame_stars(row, field.sequence, "n") for row in measured[:8]]
    assert best_radius(dim) < best_radius(bright)
    chosen = solve_standard(measured, field.sequence, Choices(aperture_fwhm={"V": 2.4}), SETTINGS)
    assert {zp.aperture_fwhm for zp in chosen.zero_points.values() if zp.band == "V"} == {2.5}
    assert {zp.aperture_fwhm for zp in chosen.zero_points.values() if zp.band == "B"} == {
        zp.aperture_fwhm for zp in solution.zero_points.values() if zp.band == "B"
    }


def test_position_loss_is_that_of_a_displaced_gaussian() -> None:
    x, y = np.meshgrid(*[np.linspace(-4, 4, 1601)] * 2)
    for radius in (0.6, 1.0, 1.5):
        inside = np.hypot(x, y) <= radius
        centred, moved = (np.exp(-4 * np.log(2) * ((x - d) ** 2 + y**2))[inside].sum() for d in (0.0, 0.1))
        assert position_loss_mag(radius) == pytest.approx(2.5 * np.log10(centred / moved), rel=0.05)


def test_repeatability_is_measured_on_the_stars() -> None:
    rng = np.random.default_rng(8)
    night = np.repeat(np.arange(15), 4)
    err = np.full((60, 30), 0.004)
    deviation = err * rng.normal(size=err.shape) + 0.005 * rng.normal(size=err.shape)
    deviation = deviation + (0.006 * rng.normal(size=(15, 30)))[night]
    frame_mag, night_mag = repeatability(deviation - deviation.mean(axis=0), err, night)
    assert frame_mag == pytest.approx(0.005, rel=0.1)
    assert night_mag == pytest.approx(0.006, rel=0.15)


def test_two_thousand_frames_take_seconds() -> None:
    rng = np.random.default_rng(1)
    field = invented_field(rng, 40)
    made = [measure(shot, field, rng) for shot in SHOTS]
    many = [replace(row, frame=f"{row.frame}-{k}") for k in range(2000 // len(made) + 1) for row in made][:2000]
    start = time.process_time()
    solve_standard(many, field.sequence, Choices(), SETTINGS)
    assert time.process_time() - start < 5.0


@pytest.mark.parametrize("spoil", [np.nan, np.inf, -np.inf, 0.0, -5.0, 1e300])
def test_absurd_fluxes_do_not_reach_the_zero_point(
    nights: tuple[list[Measured], StandardSolution], spoil: float
) -> None:
    measured, clean = nights
    field = invented_field(np.random.default_rng(11), 40)
    one = replace(measured[0], stars=measured[0].stars.copy())
    one.stars["flux_e"][:5] = spoil
    one.stars["flux_err_e"][5:8] = np.nan
    one.stars["flux_err_e"][8:10] = 0.0
    solution = solve_standard(faulty(measured, one), field.sequence, Choices(), SETTINGS)
    zero_point = solution.zero_points[one.frame]
    assert zero_point.n_stars <= 30
    assert abs(zero_point.zp_mag - clean.zero_points[one.frame].zp_mag) < 0.01


def test_frame_without_anything_measured_is_dropped(nights: tuple[list[Measured], StandardSolution]) -> None:
    measured, _ = nights
    field = invented_field(np.random.default_rng(11), 40)
    empty = replace(measured[0], stars=measured[0].stars[:0])
    solution = solve_standard(faulty(measured, empty), field.sequence, Choices(), SETTINGS)
    assert solution.verdicts[empty.frame].state == "dropped"
    assert empty.frame not in solution.zero_points


def test_high_airmass_is_not_called_cloud_even_when_it_is_unknown() -> None:
    rng = np.random.default_rng(12)
    field = invented_field(rng, 40)
    mags = SHOTS[0].target_mag
    shots = [Shot(f"B{k}", "B", FIRST_MJD + 0.01 * k, mags, airmass=1.0 + 0.2 * k) for k in range(6)]
    measured = [measure(shot, field, rng) for shot in shots]
    blind = [with_quality(row, airmass=None) for row in measured]
    for rows in (measured, blind):
        solution = solve_standard(rows, field.sequence, Choices(), SETTINGS)
        assert {verdict.state for verdict in solution.verdicts.values()} == {"kept"}


def test_dropped_frames_say_nothing_about_stars() -> None:
    rng = np.random.default_rng(13)
    field = invented_field(rng, 40)
    shots = [shot for shot in SHOTS if shot.band == "V"]
    clear = [measure(shot, field, rng) for shot in shots]
    cloudy = [measure(replace(s, name=f"c{s.name}", transparency_mag=1.5), field, rng) for s in shots[:8]]
    for row in cloudy:
        row.stars["flux_e"][5] *= 10 ** (-0.4 * 0.04)
    before, after = (solve_standard(rows, field.sequence, Choices(), SETTINGS) for rows in (clear, clear + cloudy))
    assert {after.verdicts[row.frame].state for row in cloudy} == {"dropped"}
    residuals = [next(star.residual_mag for star in s.stars if star.star == "s05") for s in (before, after)]
    assert residuals[1] == pytest.approx(residuals[0], abs=1e-6)
    assert after.colour_terms == before.colour_terms
