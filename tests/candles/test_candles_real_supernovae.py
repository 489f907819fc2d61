"""Real light curves: public nightly photometry of nearby supernovae, found through FADELINE_REFERENCE.

Sources: photometry and moduli of the Pantheon+/SH0ES release (Scolnic et al. 2022, ApJ 938, 113; Brout et al.
2022, ApJ 938, 110; Riess et al. 2022, ApJ 934, L7). The plain fitter in the same folder is another program.
"""

import csv
import importlib.util
import warnings

import numpy as np
import pytest
from candle_light_curves import real_curve

from reduce.candles import type_ia

GREY = 0.1062
LEAST_Z = 0.015


@pytest.fixture(scope="session")
def plain_fitter(reference_folder):
    """(module, model) of the plain reference fitter."""
    spec = importlib.util.spec_from_file_location("plain_fitter", reference_folder / "reference_fit.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ResourceWarning)  # that program leaves its parameter file open
        return module, module.Model(str(reference_folder))


@pytest.fixture(scope="session")
def moduli(reference_folder):
    """Name → (zHD, MU) of the release."""
    with (reference_folder / "train_distances.csv").open(encoding="utf-8") as stream:
        return {row["name"]: (float(row["zHD"]), float(row["MU"])) for row in csv.DictReader(stream)}


@pytest.fixture(scope="session")
def selftest(reference_folder):
    with (reference_folder / "selftest.csv").open(encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def chosen(photometry, moduli, selftest):
    """One survey a supernova: that of the self-test, else that with most points (first by name if equal)."""
    listed = {row["name"]: row["survey"] for row in selftest}
    surveys = {}
    for name, survey in sorted(photometry):
        surveys.setdefault(name, []).append(survey)
    for name in sorted(surveys):
        if name in moduli and moduli[name][0] > LEAST_Z:
            most = max(surveys[name], key=lambda survey: len(photometry[name, survey]))
            yield name, photometry[name, listed.get(name, most)]


def test_the_plain_fitters_published_fits_are_reproduced(photometry, selftest):
    whole = {(row["name"], row["survey"]): float(row["t_max"]) for row in selftest if row["last_phase"] == "99"}
    assert len(selftest) == 17
    for row in selftest:
        rows = photometry[row["name"], row["survey"]]
        last = float(row["last_phase"])
        if last < 99:
            z, t_max = float(rows[0]["zhel"]), whole[row["name"], row["survey"]]
            rows = [point for point in rows if (float(point["mjd"]) - t_max) / (1 + z) <= last]
        target, curve = real_curve(rows)
        estimate = type_ia.fit(curve, target)
        fit_err = np.sqrt(float(row["e_mu"]) ** 2 - GREY**2)
        case = (row["name"], row["survey"], last)
        assert abs(estimate.mu - float(row["mu"])) < 0.3 * fit_err, case
        assert abs(estimate.t_max - float(row["t_max"])) < 0.3 * float(row["e_t"]), case
        assert abs(estimate.dm15 - float(row["dm15"])) < 0.3 * float(row["e_dm15"]), case
        assert abs(estimate.e_host - float(row["E"])) < 0.3 * float(row["e_E"]), case


def compare(objects, plain_fitter, moduli):
    """Differences from the plain fitter and the release's moduli, and names that disagree unflagged."""
    module, model = plain_fitter
    from_plain, from_release, unexplained = [], [], []
    for name, rows in objects:
        target, curve = real_curve(rows)
        estimate = type_ia.fit(curve, target)
        if estimate.mu is None:
            continue
        plain = module.fit(model, curve.mjd, curve.band, curve.mag, curve.err, target.z, target.ebv_mw)
        from_plain.append(estimate.mu - plain["mu"])
        from_release.append(estimate.mu - moduli[name][1])
        if abs(from_plain[-1]) > 0.1 and not estimate.warnings:
            unexplained.append(name)
    return np.array(from_plain), np.array(from_release), unexplained


def check(from_plain, from_release, unexplained):
    assert np.median(np.abs(from_plain)) <= 0.02
    assert unexplained == []
    scatter = 1.48 * np.median(np.abs(from_release - np.median(from_release)))
    assert scatter <= 0.085
    assert abs(np.median(from_release)) <= 0.03


def test_a_sample_of_real_supernovae_agrees(photometry, moduli, selftest, plain_fitter):
    objects = list(chosen(photometry, moduli, selftest))[::8]
    assert len(objects) >= 25
    from_plain, from_release, unexplained = compare(objects, plain_fitter, moduli)
    assert len(from_plain) >= len(objects) - 1
    check(from_plain, from_release, unexplained)


@pytest.mark.slow
def test_all_real_supernovae_agree(photometry, moduli, selftest, plain_fitter):
    objects = list(chosen(photometry, moduli, selftest))
    from_plain, from_release, unexplained = compare(objects, plain_fitter, moduli)
    assert len(from_plain) >= 0.98 * len(objects)
    check(from_plain, from_release, unexplained)


@pytest.mark.slow
def test_moduli_of_cepheid_hosts(photometry, selftest, reference_folder):
    # Cepheid moduli of the hosts, Riess et al. 2022 (ApJ 934, L7)
    with (reference_folder / "train_distances.csv").open(encoding="utf-8") as stream:
        cepheid = {row["name"]: float(row["MU_CEPHEID"]) for row in csv.DictReader(stream) if row["MU_CEPHEID"]}
    differences = []
    for name in sorted(cepheid):
        groups = [rows for key, rows in sorted(photometry.items()) if key[0] == name]
        if groups:
            target, curve = real_curve(max(groups, key=len))
            estimate = type_ia.fit(curve, target)
            if estimate.mu is not None:
                differences.append(estimate.mu - cepheid[name])
    assert len(differences) >= 25
    assert abs(np.mean(differences)) < 3.0 * np.std(differences) / np.sqrt(len(differences))
    assert np.std(differences) < 0.2
