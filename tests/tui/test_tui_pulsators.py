"""Cepheids on the screens and as text: period, aliases, means, moduli; the light curve against phase."""

import math
from dataclasses import replace

import numpy as np
import pytest
from fake_desk import FakeDesk, invented_snapshot
from on_screen import screen_text, settle

from reduce.exchange.point_json import ESTIMATE_KEYS, PULSATION_KEYS, estimate_to_json
from reduce.records import (
    ApparentModulus,
    BandMean,
    BudgetLine,
    Caution,
    Estimate,
    FitCurve,
    FitPoint,
    PeriodAlias,
    Point,
    Pulsation,
    Target,
)
from tui.estimate_text import estimate_lines
from tui.folding import MOST_CYCLES_IN_TIME, phase_of, repeated_lines

PERIOD, EPOCH = 6.25, 2463000.75
NAME = "Korab b"


def invented_cepheid() -> tuple[Estimate, tuple[Point, ...]]:
    """Twelve visits of a cosine in V and I; two of them in the same night."""
    points, fitted = [], []
    for k in range(12):
        mjd = 62990.2 + 3.0 * k - (2.9 if k == 11 else 0.0)
        for band, mean, size in (("V", 15.2, 0.35), ("I", 14.5, 0.2)):
            phase = (mjd + 2400000.5 - EPOCH) / PERIOD % 1.0
            mag = mean - size * math.cos(2 * math.pi * phase)
            points.append(
                Point(NAME, None, f"2031-05-{k + 1:02d}" if k < 11 else "2031-05-11", band, mjd, mjd + 2400000.5, mag,
                      0.01, 0.01, 0.02, 1e4, 1e2, "kept", zp_group=f"cam/{band}/n{k}")
            )  # fmt: skip
            fitted.append(FitPoint(f"cam/{band}/n{k}", band, mjd, phase * PERIOD, 0.004, 0.01, False))
    star = Pulsation(
        period_d=PERIOD, period_err_d=0.004, mode="fundamental", epoch_bjd=EPOCH, coverage=0.91,
        aliases=(PeriodAlias(PERIOD, 0.962), PeriodAlias(1.1905, 0.038, "1/d alias")),
        means=(BandMean("I", 14.49, 0.004, 0.02, 0.4, 12, 1, 0.15, True),
               BandMean("V", 15.18, 0.005, 0.02, 0.7, 12, 3, 0.25, False, 0.41, 4.72)),
        moduli=(ApparentModulus("V", 18.9, 0.2, "OGLE-III LMC", "apparent"),
                ApparentModulus("W", 18.6, 0.11, "OGLE-III LMC", "free of dust")),
        relation="OGLE-III LMC", provenance="an invented source",
    )  # fmt: skip
    times = np.linspace(0.0, PERIOD, 41)
    curves = tuple(
        FitCurve(band, EPOCH - 2400000.5 + times, mean - size * np.cos(2 * np.pi * times / PERIOD), np.full(41, 0.01))
        for band, mean, size in (("I", 14.5, 0.2), ("V", 15.2, 0.35))
    )
    estimate = Estimate(
        target=NAME, kind="cepheid", mu=18.6, mu_err=0.11, mu_err_fit=0.08, t_max=None, t_max_err=None, dm15=None,
        dm15_err=None, e_host=None, e_host_err=None, chi2=22.0, n=24, verdict="μ stands",
        scale="OGLE-III LMC: LMC 18.477", warnings=(Caution("period_ambiguous", "6.25 d 96.2 %, 1.1905 d 3.8 %."),),
        budget=(BudgetLine("calibration", 0.027), BudgetLine("single star", 0.107)), curves=curves,
        points=tuple(fitted), pulsation=star,
    )  # fmt: skip
    return estimate, tuple(points)


def desk() -> FakeDesk:
    estimate, points = invented_cepheid()
    snapshot = invented_snapshot()
    view = replace(
        snapshot.targets[2], target=Target(NAME, "cepheid", 189.2, 11.9), estimate=estimate, night_points=points
    )
    return FakeDesk(replace(snapshot, targets=(view, *snapshot.targets[:2])))


async def shown(keys: tuple[str, ...], size: tuple[int, int]) -> str:
    from tui.app import FadelineApp

    app = FadelineApp(desk())
    async with app.run_test(size=size) as pilot:
        await settle(pilot)
        await pilot.press(*keys)
        await settle(pilot)
        return screen_text(app)


async def test_the_distance_screen_tells_period_aliases_means_and_moduli() -> None:
    text = await shown(("5",), (160, 60))
    for words in ("μ = 18.600 ± 0.110", "6.25000 ± 0.00400 d", "fundamental", "91 % covered", "1.1905 d 1/d alias",
                  "<V>", "not covered", "μ W  18.600 ± 0.110", "single star", "period ambiguous"):  # fmt: skip
        assert words in text
    for words in ("Δm15", "B maximum", "Type assumed"):
        assert words not in text


@pytest.mark.parametrize("size", [(80, 24), (160, 48)])
async def test_the_light_curve_is_folded_and_unfolds(size: tuple[int, int]) -> None:
    folded = await shown(("4",), size)
    assert "phase, P = 6.25 d" in folded
    assert "f Fold" in folded
    unfolded = await shown(("4", "f"), size)
    assert "phase, P" not in unfolded
    assert "MJD" in unfolded
    assert "phase, P = 6.25 d" in await shown(("4", "f", "f"), size)


async def test_every_point_can_be_reached_although_nights_hold_several() -> None:
    reached = set()
    for steps in range(1, 25):
        text = await shown(("4", *(["left"] * steps)), (160, 48))
        line = next(line for line in text.splitlines() if "night 0.010" in line)
        reached.add(line.split("  ")[0] + line.split("MJD ")[1][:10])
        assert "phase 0." in line
    assert len(reached) == 24


async def test_a_supernova_is_not_folded() -> None:
    from tui.app import FadelineApp

    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("4", "f")
        await settle(pilot)
        assert "Only a Cepheid or RR Lyrae star" in screen_text(app)


def test_phase_counts_from_maximum_light() -> None:
    _, points = invented_cepheid()
    star = invented_cepheid()[0].pulsation
    at_maximum = replace(points[0], bjd_tdb=EPOCH - 3.0 * PERIOD)
    assert phase_of(at_maximum, star) == pytest.approx(0.0, abs=1e-9)
    assert phase_of(replace(at_maximum, bjd_tdb=EPOCH + 0.25 * PERIOD), star) == pytest.approx(0.25)
    # without a barycentric time the time at the Earth has to do
    assert phase_of(replace(at_maximum, bjd_tdb=None, mjd=EPOCH - 2400000.5), star) == pytest.approx(0.0, abs=1e-9)


def test_too_many_cycles_are_not_drawn_in_time() -> None:
    estimate, points = invented_cepheid()
    lines = repeated_lines(estimate.curves, points, PERIOD)
    assert len(lines) == 2
    assert min(lines[0].x) >= points[0].mjd
    late = replace(points[0], mjd=points[0].mjd + (MOST_CYCLES_IN_TIME + 6) * PERIOD)
    assert repeated_lines(estimate.curves, (*points, late), PERIOD) == []


def test_as_text() -> None:
    text = "\n".join(estimate_lines(invented_cepheid()[0]))
    for words in ("period 6.250000 ± 0.004000 d", "1/d alias", "<V> 15.180 ± 0.005", "R21 0.410", "not covered",
                  "μ_W 18.600 ± 0.110", "relation: OGLE-III LMC (an invented source)"):  # fmt: skip
        assert words in text
    assert "t_max" not in text


def test_as_json() -> None:
    row = estimate_to_json(invented_cepheid()[0])
    assert tuple(row) == ESTIMATE_KEYS + PULSATION_KEYS
    assert row["period_d"] == PERIOD
    assert row["aliases"][1] == {"period_d": 1.1905, "probability": 0.038, "note": "1/d alias"}
    assert row["means"][0]["r21"] is None
    assert row["dm15"] is None
