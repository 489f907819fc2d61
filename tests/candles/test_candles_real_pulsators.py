"""Real Cepheids of the LMC and RR Lyrae stars of the field and of Sculptor, found through FADELINE_REFERENCE.

Cepheids: OGLE-III and OGLE-IV (Soszyński et al. 2015, Acta Astron. 65, 297). RR Lyrae stars: Monson et al. 2017 (AJ
153, 96), means of Neeley et al. 2019 (MNRAS 490, 4254), parallaxes of Gaia DR3; Martínez-Vázquez et al. 2016.
"""

import math
import os
from pathlib import Path

import numpy as np
import pytest
from pulsating_stars import real_stars, target

from reduce.candles.candle import candle_for
from reduce.candles.relations import calibrations

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def folder():
    named = os.environ.get("FADELINE_REFERENCE")
    places = [Path(named) / "reference" / "variables", Path(named) / "variables"] if named else []
    found = next((place for place in places if place.is_dir()), None)
    if found is None:
        pytest.skip("FADELINE_REFERENCE names no folder with variables/")
    return found


def right(estimate, row, curve):
    """The period's peak, not an alias: within a quarter of the resolution."""
    away = abs(1.0 / estimate.pulsation.period_d - 1.0 / float(row["period_d"]))
    return away < 0.25 / np.ptp(curve.bjd_tdb)


def names(estimate):
    return {warning.name for warning in estimate.warnings}


def means(estimate):
    return {mean.band: mean for mean in estimate.pulsation.means}


@pytest.fixture(scope="module")
def cepheids(folder):
    facts = {"metallicity_dex": -0.30, "metallicity_err": 0.08, "relation": "Fouque 2007 Galaxy"}
    return [
        (row, curve, candle_for("cepheid").fit(curve, target("cepheid", **facts)))
        for row, curve in real_stars(folder, "cepheid")
    ]


def test_cepheid_periods(cepheids):
    good = [right(found, row, curve) for row, curve, found in cepheids]
    assert np.mean(good) >= 0.97
    assert all(ok or "period_ambiguous" in names(found) for ok, (_, _, found) in zip(good, cepheids, strict=True))


def test_cepheid_means(cepheids):
    """Against the catalogue's intensity means of OGLE-IV, or of OGLE-III where the V points are from there."""
    away = {"V": [], "I": []}
    for row, _, found in cepheids:
        for band, values in away.items():
            published = [float(row[key]) for key in (f"mean_{band}", f"ogle3_mean_{band}") if row[key]]
            values.append(min(abs(means(found)[band].mag - each) for each in published))
    for band, values in away.items():
        assert np.mean(np.array(values) <= 0.02) >= 0.95, band


def test_cepheid_modes(cepheids):
    """All of them pulsate in the fundamental mode."""
    assert np.mean([found.pulsation.mode == "fundamental" for _, _, found in cepheids]) >= 0.95


def test_the_modulus_of_the_lmc_by_a_galactic_calibration(cepheids):
    """18.477 ± 0.026 (Pietrzyński et al. 2019, Nature 567, 200), from stars within the calibration's periods."""
    calibration = calibrations()["Fouque 2007 Galaxy"]
    inside = [
        found
        for _, _, found in cepheids
        if found.mu is not None
        and not names(found) & {"period_outside", "mode_assumed"}
        and found.pulsation.mode == "fundamental"
    ]
    assert len(inside) > 25
    assert all("metallicity term" in {line.component for line in found.budget} for found in inside)
    mu = np.array([found.mu for found in inside])
    parts = {line.component: line.mag for line in inside[0].budget}
    shared = [parts[name] for name in ("calibration", "metallicity", "metallicity term")]
    err = math.hypot(*shared, np.std(mu) / math.sqrt(len(mu)), 0.02)  # 0.02: zero points of the survey
    assert calibration.gamma < 0
    assert abs(np.median(mu) - 18.477) / math.hypot(err, 0.026) < 2.0


@pytest.fixture(scope="module")
def rr_lyrae(folder):
    found = []
    for row, curve in real_stars(folder, "rrlyrae"):
        facts = {"ebv_scale": "SFD"}
        if row["ebv"]:
            facts["ebv_mw"] = float(row["ebv"])
        if row["fe_h"]:
            facts["metallicity_dex"] = float(row["fe_h"])
        found.append((row, curve, candle_for("rr_lyrae").fit(curve, target("rr_lyrae", **facts))))
    return found


def test_rr_lyrae_periods(rr_lyrae):
    """Of the stars seen in six nights or more; a wrong one is flagged, whatever the number of nights."""
    good = [(right(found, row, curve), names(found)) for row, curve, found in rr_lyrae]
    many = [ok for ok, warned in good if "few_nights" not in warned]
    assert len(many) >= 40
    assert np.mean(many) >= 0.95
    for ok, warned in good:
        assert ok or warned & {"period_ambiguous", "few_nights", "scatter", "phase_coverage"}


def test_rr_lyrae_types(rr_lyrae):
    same = [found.pulsation.mode == row["type"] for row, curve, found in rr_lyrae if right(found, row, curve)]
    assert np.mean(same) >= 0.97


def test_rr_lyrae_means(rr_lyrae):
    flags = {"phase_coverage", "period_ambiguous", "few_nights", "scatter"}
    sound = [
        abs(means(found)["V"].mag - float(row["mean_V"]))
        for row, _, found in rr_lyrae
        if means(found)["V"].covered and not names(found) & (flags - {"phase_coverage"})
    ]
    assert len(sound) >= 30
    assert np.mean(np.array(sound) <= 0.02) >= 0.85  # the catalogue's own means have errors of some 0.01 mag
    poor = [found for row, _, found in rr_lyrae if abs(means(found)["V"].mag - float(row["mean_V"])) > 0.05]
    assert all(names(found) & flags for found in poor)


def test_field_stars_agree_with_their_parallaxes(rr_lyrae):
    """Gaia DR3 parallaxes with +0.03 mas (Lindegren et al. 2021, A&A 649, A4, from memory)."""
    pulls = []
    for row, _, found in rr_lyrae:
        if row["plx_dr3_mas"] and found.mu is not None:
            parallax, err = float(row["plx_dr3_mas"]) + 0.03, float(row["plx_dr3_err"])
            if err / parallax < 0.1:
                mu = 10.0 - 5.0 * math.log10(parallax)
                pulls.append((found.mu - mu) / math.hypot(found.mu_err, 2.171 * err / parallax))
    assert len(pulls) >= 20
    assert 0.6 < np.sqrt(np.mean(np.square(pulls))) < 1.4
    assert abs(np.median(pulls)) < 1.0
