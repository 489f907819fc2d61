"""Standard stars to zero points, extinction and colour terms, on invented nights with known truth."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from synthetic_nights import (
    FIRST_MJD,
    FIRST_ORDER,
    SETTINGS,
    TERMS,
    ZERO_POINTS,
    Field,
    Shot,
    measure,
)

from reduce.field.standards import chosen, read_standards
from reduce.records import LADDER_FWHM, Sequence
from reduce.standard.frame_stars import FrameStars, frame_stars
from reduce.standard.transformation import Transformation, growths, seasons, solve_transformations

NOWHERE = Path("/nonexistent")
STANDARDS = read_standards(NOWHERE)
LIGHT_OF_2_FWHM = 1 - 2.0**-16
WIDE, NARROW = (1.0, 1.3, 1.6, 1.9, 2.2), (1.10, 1.12, 1.15, 1.18, 1.20)


def nights(
    airmasses: dict[str, tuple[float, ...]],
    rng: np.random.Generator,
    truth: Sequence = STANDARDS,
    bands: str = "BV",
    noise: bool = True,
    cloud: dict[str, float] | None = None,
    step: float = 0.0,
) -> list[tuple]:
    """Frames of two standard fields through some nights; ``step``: how much each night's zero point is lower."""
    pairs = []
    for n, (night, places) in enumerate(airmasses.items()):
        for k, airmass in enumerate(places):
            for prefix in ("RU 149", "PG0918"):
                stars = chosen(truth, np.array([i for i, s in enumerate(truth.ids) if s.startswith(prefix)]))
                for band in bands:
                    name = f"{night}-{k}-{prefix}-{band}"
                    shot = Shot(
                        name, band, FIRST_MJD + n + 0.02 * k, dict.fromkeys("BVRI", 14.0), airmass=airmass,
                        exposure_s=30.0, noise=noise,
                        transparency_mag=(cloud or {}).get(name, 0.0) + step * n,
                    )  # fmt: skip
                    row = measure(shot, Field(dict(stars.mag), stars), rng, ())
                    growth = np.full(len(LADDER_FWHM), 2.5 * np.log10(LIGHT_OF_2_FWHM))
                    row = replace(row, growth_mag=growth, growth_err_mag=np.full(len(LADDER_FWHM), 0.0005))
                    pairs.append((row, frame_stars(row, STANDARDS, night)))
    return pairs


def solve(pairs: list[tuple]) -> dict[str, Transformation]:
    return {solved.band: solved for solved in solve_transformations(pairs, STANDARDS, SETTINGS)}


def test_without_noise_what_was_put_in_comes_back() -> None:
    rng = np.random.default_rng(1)
    for band, solved in solve(nights({"2023-02-25": WIDE}, rng, noise=False)).items():
        (night,) = solved.nights
        assert solved.term == pytest.approx(TERMS[band], abs=1e-4)
        assert night.zp_mag == pytest.approx(ZERO_POINTS[band], abs=1e-3)
        assert night.first_order == pytest.approx(FIRST_ORDER[band], abs=2e-4)
        assert night.first_order_is_own
        assert solved.rms_mag < 1e-3


def test_errors_are_honest() -> None:
    pulls: dict[str, list[float]] = {"term": [], "zero point": [], "extinction": [], "borrowed": []}
    for seed in range(20):
        rng = np.random.default_rng(seed)
        # The sky's own magnitudes differ from the published ones by the published errors.
        truth = replace(
            STANDARDS,
            mag={b: m + STANDARDS.mag_err[b] * rng.normal(size=len(m)) for b, m in STANDARDS.mag.items()},
        )
        solved_bands = solve(nights({"2023-02-25": WIDE, "2023-02-26": WIDE, "2023-02-27": NARROW}, rng, truth))
        for band, solved in solved_bands.items():
            pulls["term"].append((solved.term - TERMS[band]) / solved.term_err)
            for night in solved.nights:
                name = "extinction" if night.first_order_is_own else "borrowed"
                pulls[name].append((night.first_order - FIRST_ORDER[band]) / night.first_order_err)
                pulls["zero point"].append((night.zp_mag - ZERO_POINTS[band]) / night.zp_err_mag)
    for name in ("term", "zero point", "extinction"):
        assert 0.75 < np.sqrt(np.mean(np.square(pulls[name]))) < 1.25, name
    # A borrowed extinction is held to a wider scatter of nights than these had.
    assert np.sqrt(np.mean(np.square(pulls["borrowed"]))) < 1.0


def test_a_night_at_one_height_takes_the_extinction_of_the_others() -> None:
    rng = np.random.default_rng(3)
    solved = solve(nights({"2023-02-25": WIDE, "2023-02-26": NARROW}, rng))["V"]
    wide, narrow = solved.nights
    assert wide.first_order_is_own
    assert not narrow.first_order_is_own
    assert narrow.first_order == pytest.approx(wide.first_order, abs=0.04)
    assert narrow.zp_err_mag > 2 * wide.zp_err_mag


def test_a_clouded_frame_and_a_wrong_star_are_set_aside_and_nothing_else() -> None:
    rng = np.random.default_rng(4)
    mags = {b: m.copy() for b, m in STANDARDS.mag.items()}
    star = STANDARDS.ids.index("PG0918+029C")
    mags["V"][star] += 0.12
    truth = replace(STANDARDS, mag=mags)
    name = "2023-02-25-2-RU 149-V"
    solved = solve(nights({"2023-02-25": WIDE, "2023-02-26": WIDE}, rng, truth, cloud={name: 0.3}))
    assert solved["V"].set_aside == {"PG0918+029C": solved["V"].set_aside["PG0918+029C"]}
    assert "fainter than published" in solved["V"].set_aside["PG0918+029C"]
    assert list(solved["V"].frames_set_aside) == [name]
    assert solved["V"].term == pytest.approx(TERMS["V"], abs=0.01)
    assert solved["B"].frames_set_aside == {}


def test_drift_is_shown() -> None:
    rng = np.random.default_rng(5)
    dates = [f"2023-02-{day}" for day in range(20, 26)]
    solved = solve(nights(dict.fromkeys(dates, WIDE), rng, bands="V", step=0.002))["V"]
    assert solved.drift_mag_per_30_d == pytest.approx(-0.06, abs=4 * solved.drift_err_mag_per_30_d)
    assert solved.drift_err_mag_per_30_d < 0.02


def test_seasons_end_at_long_pauses_and_after_half_a_year() -> None:
    assert seasons(["2023-01-01", "2023-02-15", "2023-06-01"]) == [{"2023-01-01", "2023-02-15"}, {"2023-06-01"}]
    year = [f"2023-{month:02d}-{day:02d}" for month in range(1, 13) for day in (1, 15)]
    assert [len(season) for season in seasons(year)] == [14, 10]


def test_order_of_frames_does_not_matter_to_the_last_bit() -> None:
    pairs = nights({"2023-02-25": WIDE, "2023-02-26": NARROW}, np.random.default_rng(6))
    assert repr(solve(pairs)) == repr(solve(pairs[::-1]))


def test_frames_low_in_the_sky_or_without_airmass_are_left_out() -> None:
    rng = np.random.default_rng(7)
    pairs = nights({"2023-02-25": (*WIDE, 3.1)}, rng, bands="V")
    blind: list[tuple] = [
        (row, replace(frame, quality=replace(frame.quality, airmass=None))) for row, frame in pairs[:2]
    ]
    solved = solve(blind + pairs[2:])["V"]
    assert solved.nights[0].airmass_range == (1.3, 2.2)


def test_few_colours_give_no_colour_term() -> None:
    rng = np.random.default_rng(8)
    pairs = nights({"2023-02-25": WIDE}, rng, bands="V")
    near = {"RU 149B", "RU 149G", "PG0918+029A", "PG0918+029C"}
    dull: list[tuple] = []
    for row, frame in pairs:
        mag = np.where(np.isin(np.array(STANDARDS.ids), list(near))[:, None], frame.mag, np.nan)
        changed: FrameStars = replace(frame, mag=mag)
        dull.append((row, changed))
    solved = solve(dull)["V"]
    assert not solved.term_fitted
    assert np.isnan(solved.term_err)
    assert solved.term == pytest.approx(0.0, abs=1e-6)


def test_a_frame_without_a_growth_curve_borrows_the_usual_one() -> None:
    pairs = nights({"2023-02-25": WIDE}, np.random.default_rng(9), bands="V")
    rows = [row for row, _ in pairs]
    rows[0] = replace(rows[0], growth_mag=np.full(len(LADDER_FWHM), np.nan))
    found = growths(rows)
    assert found[rows[0].frame][0] == found[rows[1].frame][0]
    assert found[rows[0].frame][1] > found[rows[1].frame][1]
