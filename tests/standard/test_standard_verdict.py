"""Every rule fires on its own fault and leaves good frames alone; what is kept is right."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from synthetic_nights import FIRST_MJD, SETTINGS, TARGET, Shot, invented_field, measure, nightly_shots, with_quality

from reduce.curve.nights import make_points
from reduce.records import LADDER_FWHM, Choices, FrameVerdict, Measured, StarFlag
from reduce.standard.residual_images import mark_residual_images
from reduce.standard.solve import solve_standard
from reduce.standard.struck import mark_struck
from reduce.standard.transparency import dew

SHOTS = nightly_shots(nights=8, repeats=3)


def verdicts(rows: list[Measured], seed: int = 11) -> dict[str, FrameVerdict]:
    field = invented_field(np.random.default_rng(seed), 40)
    return dict(solve_standard(rows, field.sequence, Choices(), SETTINGS).verdicts)


@pytest.fixture(scope="module")
def good() -> list[Measured]:
    rng = np.random.default_rng(11)
    field = invented_field(rng, 40)
    return [measure(shot, field, rng) for shot in SHOTS]


def judged(good: list[Measured], *bad: Measured) -> tuple[list[FrameVerdict], set[str]]:
    """Verdicts of the bad frames among the good ones, and the states of these."""
    names = {row.frame for row in bad}
    found = verdicts([row for row in good if row.frame not in names] + list(bad))
    return [found[row.frame] for row in bad], {found[row.frame].state for row in good if row.frame not in names}


def again(shot: Shot, **changes: object) -> Measured:
    """One of the good frames, taken once more in other circumstances."""
    field = invented_field(np.random.default_rng(11), 40)
    return measure(replace(shot, **changes), field, np.random.default_rng(3))  # type: ignore[arg-type]


def shots_of(band: str) -> list[Shot]:
    return [shot for shot in SHOTS if shot.band == band]


def test_good_frames_are_kept(good: list[Measured]) -> None:
    found = verdicts(good)
    assert {verdict.state for verdict in found.values()} == {"kept"}
    assert all(verdict.reasons == () for verdict in found.values())


@pytest.mark.parametrize(("labelled", "real"), [
    ("V", "R"), ("R", "V"), ("B", "V"), ("V", "B"), ("R", "I"), ("I", "R"), ("V", "I"), ("B", "I"),
])  # fmt: skip
def test_a_slipped_filter_wheel_is_found_and_the_filter_named(good: list[Measured], labelled: str, real: str) -> None:
    (verdict,), rest = judged(good, again(shots_of(labelled)[4], seen_through=real))
    assert verdict.state == "dropped"
    assert f"look like {real}, not {labelled}" in " ".join(verdict.reasons)
    assert rest == {"kept"}


def test_a_wheel_that_slipped_for_most_of_a_band_accuses_the_right_frames(good: list[Measured]) -> None:
    slipped = [again(shot, seen_through="R") for shot in shots_of("V")[:14]]
    found, rest = judged(good, *slipped)
    assert {verdict.state for verdict in found} == {"dropped"}
    assert "dropped" not in rest


def test_cloud_within_a_night(good: list[Measured]) -> None:
    (night, season, thick), rest = judged(
        good,
        again(shots_of("V")[2], transparency_mag=0.26),
        again(shots_of("V")[7], transparency_mag=0.6),
        again(shots_of("V")[12], transparency_mag=1.5),
    )
    assert [v.state for v in (night, season, thick)] == ["doubtful", "doubtful", "dropped"]
    assert "than at best that night" in night.reasons[0]
    assert "less than when clear" in season.reasons[0]
    assert rest == {"kept"}


def test_cloud_over_part_of_the_frame(good: list[Measured]) -> None:
    (thin, bank, hardly), rest = judged(
        good,
        again(shots_of("R")[2], plane_mag=(0.1, 0.05)),
        again(shots_of("R")[7], plane_mag=(-0.3, 0.2)),
        again(shots_of("R")[12], plane_mag=(0.015, 0.0)),
    )
    assert [v.state for v in (thin, bank, hardly)] == ["doubtful", "dropped", "kept"]
    assert "cloud over part of the frame" in thin.reasons[0]
    assert rest == {"kept"}


def test_patchy_cloud_by_degrees(good: list[Measured]) -> None:
    (some, much), rest = judged(good, again(shots_of("I")[2], patchy_mag=0.16), again(shots_of("I")[7], patchy_mag=0.5))
    assert some.state in ("doubtful", "dropped")
    assert much.state == "dropped"
    assert all("patchy cloud" in " ".join(verdict.reasons) for verdict in (some, much))
    assert rest == {"kept"}


def test_what_the_image_says(good: list[Measured]) -> None:
    names = iter(shots_of("B"))
    cases: list[tuple[dict[str, object], str, str]] = [
        ({"fwhm_px": 6.5}, "doubtful", "2.2 times wider"),
        ({"fwhm_px": 13.0}, "dropped", "4.3 times wider"),
        ({"sky_gradient": 0.4}, "doubtful", "40 % brighter on one side"),
        ({"sky_gradient": 0.1}, "kept", ""),
        ({"sun_altitude_deg": -11.0}, "kept", ""),
        ({"sun_altitude_deg": -11.0, "sky_e_px": 700.0}, "doubtful", "twilight"),
        ({"sun_altitude_deg": -30.0, "sky_e_px": 1200.0}, "kept", ""),
        ({"sun_altitude_deg": -8.0}, "doubtful", "twilight"),
        ({"elongation": 1.9, "trail_agreement": 0.9}, "doubtful", "trailed"),
        ({"elongation": 3.0, "trail_agreement": 0.9}, "dropped", "trailed"),
        ({"n_trails": 2}, "kept", ""),
    ]
    rows = [with_quality(again(next(names)), **changes) for changes, _, _ in cases]
    found, rest = judged(good, *rows)
    assert [verdict.state for verdict in found] == [state for _, state, _ in cases]
    assert all(words in " ".join(verdict.reasons) for verdict, (_, _, words) in zip(found, cases, strict=True))
    assert rest == {"kept"}


def test_trailed_stars_that_do_not_agree_are_dropped_for_that(good: list[Measured]) -> None:
    row = with_quality(again(shots_of("V")[3], patchy_mag=0.5), elongation=1.9, trail_agreement=0.9)
    (verdict,), _ = judged(good, row)
    assert verdict.state == "dropped"
    assert any("stars trailed one by one" in reason for reason in verdict.reasons)


def with_encircled(row: Measured, share: list[float]) -> Measured:
    """The same frame with another image: light within the ladder's radii as shares of the light within the last."""
    stars = row.stars.copy()
    n = len(LADDER_FWHM)
    stars["flux_e"][:, :n] = stars["flux_e"][:, n - 1 : n] * np.array(share)
    return replace(row, stars=stars)


def test_rings_are_out_of_focus_and_winged_images_are_not(good: list[Measured]) -> None:
    r = np.array(LADDER_FWHM)
    ring = np.clip(((r * 1.5) ** 2 - 0.16) / 0.84, 0.05, 1.0)
    moffat = 1 - (1 + (r / (0.5 / (2 ** (1 / 2.5) - 1) ** 0.5)) ** 2) ** -1.5
    (hollow, winged), _ = judged(
        good,
        with_encircled(again(shots_of("V")[3]), list(ring / ring[-1])),
        with_encircled(again(shots_of("V")[8]), list(moffat / moffat[-1])),
    )
    assert hollow.state == "doubtful"
    assert "out of focus" in hollow.reasons[0]
    assert not any("out of focus" in reason for reason in winged.reasons)


def test_dew_is_told_from_cloud_and_from_rising_airmass() -> None:
    mjd = np.linspace(0.0, 0.3, 9)
    airmass, sinks = np.full(9, 1.2), np.linspace(0.0, 0.4, 9)
    width, sky = np.linspace(3.0, 4.2, 9), np.linspace(2.0, 1.5, 9)
    assert dew(sinks, mjd, width, airmass, sky)[-1] == pytest.approx(0.36, abs=0.06)
    assert not dew(sinks, mjd, np.full(9, 3.0), airmass, np.full(9, 2.0)).any()  # haze: neither width nor sky
    assert not dew(sinks[[5, 1, 8, 0, 3, 7, 2, 6, 4]], mjd, width, airmass, sky).any()  # cloud comes and goes
    assert not dew(0.1 * sinks, mjd, width, airmass, sky).any()
    low = np.linspace(1.2, 2.2, 9)
    assert not dew(sinks, mjd, 3.0 * (low / 1.2) ** 0.6, low, np.full(9, 2.0)).any()


def test_a_dewed_night_is_doubtful_from_where_it_sank() -> None:
    rng = np.random.default_rng(5)
    field = invented_field(rng, 40)
    shots = [
        Shot(f"V{k}", "V", FIRST_MJD + 0.02 * k, SHOTS[0].target_mag, transparency_mag=max(0.0, 0.05 * (k - 4)))
        for k in range(10)
    ]
    rows = [
        with_quality(measure(shot, field, rng), fwhm_px=3.0 + 0.15 * max(0, k - 4), sky_e_px=300.0 * 0.96**k)
        for k, shot in enumerate(shots)
    ]
    found = solve_standard(rows, field.sequence, Choices(), SETTINGS).verdicts
    assert {found[f"V{k}"].state for k in range(5)} == {"kept"}
    assert {found[f"V{k}"].state for k in range(7, 10)} == {"doubtful"}
    assert found["V9"].reasons[0].startswith("dew: ")


def test_a_trail_drops_the_target_it_crosses_and_loses_the_stars_it_crosses(good: list[Measured]) -> None:
    row = again(shots_of("V")[5])
    stars = row.stars.copy()
    stars["flags"][[0, 1]] |= int(StarFlag.TRAIL)
    beside = replace(row, stars=stars)
    field = invented_field(np.random.default_rng(11), 40)
    rows = [other for other in good if other.frame != row.frame]
    solution = solve_standard([*rows, beside], field.sequence, Choices(), SETTINGS)
    assert solution.verdicts[row.frame].state == "kept"
    assert solution.zero_points[row.frame].n_stars == 38
    stars = row.stars.copy()
    stars["flags"][stars["role"] == 1] |= int(StarFlag.TRAIL)
    stars["psf_flags"][stars["role"] == 1] |= int(StarFlag.TRAIL)
    solution = solve_standard([*rows, replace(row, stars=stars)], field.sequence, Choices(), SETTINGS)
    assert solution.verdicts[row.frame].state == "dropped"
    assert TARGET.name in solution.verdicts[row.frame].reasons[0]
    point = next(p for p in make_points(solution, (TARGET,), Choices())[0] if p.file == row.frame)
    assert point.state == "dropped"
    assert "satellite trail" in point.flags


def test_ghosts_of_saturated_stars_are_flagged_on_the_next_frame_only() -> None:
    field = invented_field(np.random.default_rng(11), 40)
    rng = np.random.default_rng(1)
    shots = [replace(SHOTS[0], name=f"f{k}", mjd=FIRST_MJD + 0.004 * k) for k in range(4)]
    rows = [measure(shot, field, rng) for shot in shots]
    x, y = float(rows[1].stars["x_px"][-1]), float(rows[1].stars["y_px"][-1])
    rows[0] = with_quality(rows[0], saturated_px=((x + 2.0, y),))
    marked = mark_residual_images(reversed(rows))[::-1]
    hit = marked[1].stars["flags"] & int(StarFlag.RESIDUAL_IMAGE) != 0
    assert hit[-1].all()
    assert not hit[:-1].all(axis=1).any()
    for k in (0, 2, 3):
        assert marked[k] is rows[k]
    still = [rows[0], with_quality(rows[1], saturated_px=((x + 2.3, y),))]  # the telescope did not move
    assert mark_residual_images(still)[1] is still[1]
    later = [rows[0], replace(rows[1], info=replace(rows[1].info, mjd_mid=FIRST_MJD + 0.1))]  # type: ignore[type-var]
    assert mark_residual_images(later)[1] is later[1]
    other = [rows[0], replace(rows[1], info=replace(rows[1].info, camera="another"))]  # type: ignore[type-var]
    assert mark_residual_images(other)[1] is other[1]


def test_what_is_kept_is_right_and_good_frames_are_kept() -> None:
    """Six seasons with thin haze, flips, planes, patchy frames, clouds and slips among fault-free frames."""
    pulls, kept, n_good = [], 0, 0
    for seed in range(6):
        rng = np.random.default_rng(seed)
        field = invented_field(rng, 30)
        shots, faulty = [], set()
        for shot in nightly_shots(nights=8, repeats=3, bands="BVRI", rise=0.0):
            side = int(shot.name[1:3]) % 2
            new = replace(
                shot, rotation_deg=180.0 * side, transparency_mag=abs(rng.normal(0, 0.03)), plane_mag=(0.0, 0.008),
                flat_scatter_mag=0.003,
            )  # fmt: skip
            if rng.uniform() < 0.15:
                faulty.add(shot.name)
                kind = rng.integers(4)
                new = [
                    replace(new, transparency_mag=rng.uniform(0.3, 1.5)),
                    replace(new, patchy_mag=rng.uniform(0.05, 0.4)),
                    replace(new, plane_mag=tuple(rng.normal(0, 0.1, 2))),
                    replace(new, seen_through=str(rng.choice([b for b in "BVRI" if b != shot.band]))),
                ][kind]  # fmt: skip
            shots.append(new)
        rows = [measure(shot, field, rng) for shot in shots]
        solution = solve_standard(rows, field.sequence, Choices(), SETTINGS)
        good = [shot.name for shot in shots if shot.name not in faulty]
        n_good += len(good)
        kept += sum(solution.verdicts[name].state == "kept" for name in good)
        truth = {shot.name: shot.target_mag[shot.band] for shot in shots}
        for point in make_points(solution, (TARGET,), Choices())[0]:
            if point.state == "kept" and point.mag is not None:
                err = np.sqrt(point.err**2 + point.err_night**2 + point.err_band**2)
                pulls.append((point.mag - truth[point.file]) / err)
    size = np.abs(pulls)
    assert n_good > 400
    assert kept >= 0.95 * n_good
    assert np.mean(size > 3.5) <= 0.002
    assert size.max() < 5.0


def with_psf(row: Measured) -> Measured:
    """The same frame with fluxes under a PSF that agree with the largest aperture."""
    stars = row.stars.copy()
    last = len(LADDER_FWHM) - 1
    stars["psf_flux_e"], stars["psf_flux_err_e"] = stars["flux_e"][:, last], stars["flux_err_e"][:, last]
    return replace(row, stars=stars)


def test_a_ray_on_a_star_is_found_by_what_the_psf_left_out() -> None:
    row = with_psf(again(SHOTS[0]))
    psf_err = row.stars["psf_flux_err_e"]
    row.stars["psf_rejected"][[2, 3, 4]] = 3
    row.stars["flux_e"][2] += 12 * psf_err[2] + 0.05 * row.stars["psf_flux_e"][2]
    row.stars["flux_e"][5] += 12 * psf_err[5] + 0.05 * row.stars["psf_flux_e"][5]  # a neighbour: nothing was left out
    struck = (mark_struck(row.stars)["flags"] & int(StarFlag.COSMIC_RAY)) != 0
    assert struck[2].all()
    assert not np.delete(struck, 2, axis=0).any()
    assert mark_struck(again(SHOTS[0]).stars) is not None
    bare = again(SHOTS[0]).stars
    assert mark_struck(bare) is bare
