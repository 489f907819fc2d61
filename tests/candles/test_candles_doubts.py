"""Whether the fit knows that it does not know: light curves that no normal type Ia makes, invented and real."""

from dataclasses import replace

import numpy as np
import pytest
from candle_light_curves import TRUTH, light_curve, simulated, taken, target

from reduce.candles import type_ia

CLEAN = simulated(TRUTH)


def doubts(estimate):
    return {caution.name for caution in estimate.warnings if caution.doubts_type}


def names(estimate):
    return {caution.name for caution in estimate.warnings}


def test_a_normal_supernova_raises_no_doubt():
    noise = np.random.default_rng(8)
    for dm15 in (0.85, 1.1, 1.5):
        assert not doubts(type_ia.fit(simulated({**TRUTH, "dm15": dm15}, noise=noise), target()))


def plateau():
    """A hydrogen-rich supernova: V 2.5 mag fainter than a type Ia, flat for 90 d, ever redder (common practice)."""
    t = np.arange(0.0, 90.0, 4.0)
    v = TRUTH["mu"] - 16.7 + 0.004 * t
    mag = {"B": v + 0.0 + 0.015 * t, "V": v, "R": v - 0.2 - 0.003 * t, "I": v - 0.3 - 0.005 * t}
    mjd, band = np.tile(60100.0 + t, 4), np.repeat(list(mag), len(t))
    return light_curve(mjd, band, np.concatenate(list(mag.values())), np.full(len(mjd), 0.03))


def test_a_plateau_is_no_type_ia():
    estimate = type_ia.fit(plateau(), target())
    assert len(doubts(estimate)) >= 1 or "no normal type Ia" in estimate.verdict


def test_a_red_supernova_without_second_maximum_is_doubted():
    """A stripped-envelope supernova: I falls from its only maximum without rising again (common practice)."""
    phase = np.where(CLEAN.band == "I", (CLEAN.mjd - TRUTH["t_max"]) / 1.02, 0.0)
    dimmed = CLEAN.mag + 0.9 * np.exp(-0.5 * ((phase - 26.0) / 6.0) ** 2) * (phase != 0.0)
    assert "no_second_maximum" in doubts(type_ia.fit(replace(CLEAN, mag=dimmed), target()))


def test_too_blue_is_seen_and_dust_is_not_made_negative():
    blue = replace(CLEAN, mag=CLEAN.mag - 0.6 * (CLEAN.band == "B") - 0.2 * (CLEAN.band == "V"))
    estimate = type_ia.fit(blue, target())
    assert "too_blue" in doubts(estimate)
    assert estimate.e_host >= 0


@pytest.mark.parametrize("offset", [-2.0, 2.0])
def test_far_off_the_hubble_law_is_said_and_changes_nothing(offset):
    z = TRUTH["z"]  # its Hubble modulus is 34.6 on the model's scale, as TRUTH has it
    moved = type_ia.fit(replace(CLEAN, mag=CLEAN.mag + offset), target(z=z))
    evidence = {caution.name: caution.evidence for caution in moved.warnings}
    assert ("fainter" if offset > 0 else "brighter") in evidence["off_hubble_law"]
    assert moved.mu == pytest.approx(type_ia.fit(CLEAN, target(z=z)).mu + offset, abs=0.005)
    assert "off_hubble_law" not in names(type_ia.fit(CLEAN, target(z=z)))


def test_a_shape_at_the_edge_is_said():
    slow = simulated({**TRUTH, "dm15": 0.7})
    stretched = replace(slow, mjd=TRUTH["t_max"] + 1.35 * (slow.mjd - TRUTH["t_max"]))
    assert "shape_at_edge" in doubts(type_ia.fit(stretched, target()))


def test_a_gap_and_a_single_epoch_are_said():
    phase = (CLEAN.mjd - TRUTH["t_max"]) / 1.02
    holed = type_ia.fit(taken(CLEAN, np.flatnonzero((phase < -2.0) | (phase > 23.0))), target())
    evidence = {caution.name: caution.evidence for caution in holed.warnings}
    assert "to +2" in evidence["gap"]
    assert "gap" not in names(type_ia.fit(CLEAN, target()))
    one = type_ia.fit(simulated(TRUTH, phases=np.array([3.0, 3.01])), target())
    assert "single_epoch" in names(one)


def test_only_red_bands_are_said():
    assert "no_B_or_V" in names(type_ia.fit(simulated(TRUTH, bands="RI"), target()))
    assert "no_B_or_V" not in names(type_ia.fit(simulated(TRUTH, bands="VRI"), target()))


# ---- real ones -------------------------------------------------------------------------------------------


def doubted(objects):
    """Names with and without a doubt."""
    found = {thing.name: bool(doubts(type_ia.fit(curve, thing))) for _, thing, curve in objects}
    return [name for name in found if found[name]], [name for name in found if not found[name]]


def test_some_real_supernovae_that_are_not_type_ia_are_doubted(reference_folder):
    from supernova_samples import not_type_ia

    few = [thing for thing in not_type_ia(reference_folder.parent) if len(thing[2]) < 60]
    assert len(few) >= 10
    yes, no = doubted(few)
    # of 85 % asked for, as far as so few can tell: a share of n has an error of sqrt(0.85 0.15 / n)
    assert len(yes) >= (0.85 - np.sqrt(0.85 * 0.15 / len(few))) * len(few), no


@pytest.mark.slow
def test_real_supernovae_that_are_not_type_ia_are_doubted(reference_folder):
    from supernova_samples import not_type_ia

    objects = list(not_type_ia(reference_folder.parent))
    assert len(objects) == 36
    yes, no = doubted(objects)
    assert len(yes) >= 0.85 * len(objects), no


def test_real_type_ia_supernovae_are_seldom_doubted(reference_folder):
    from supernova_samples import TypeIaSample

    sample = TypeIaSample(reference_folder.parent)
    chosen = sample.names(held_out=True)[::3]
    assert len(chosen) >= 40
    estimates = [type_ia.fit(curve, thing) for thing, curve in map(sample.curve, chosen)]
    assert np.mean([bool(doubts(estimate)) for estimate in estimates]) <= 0.2
