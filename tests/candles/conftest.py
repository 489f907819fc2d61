"""Public photometry of real supernovae, found through FADELINE_REFERENCE."""

import csv
import os
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def reference_folder():
    folder = os.environ.get("FADELINE_REFERENCE")
    if not folder:
        pytest.skip("FADELINE_REFERENCE names no folder with the reference photometry")
    return Path(folder) / "type_ia"


@pytest.fixture(scope="session")
def photometry(reference_folder):
    """Public nightly photometry by (supernova, survey): errors below 0.3 mag, in order of time."""
    groups = {}
    with (reference_folder / "train_photometry.csv").open(encoding="utf-8") as stream:
        for row in csv.DictReader(stream):
            if float(row["err"]) < 0.3:
                groups.setdefault((row["name"], row["survey"]), []).append(row)
    return {key: sorted(rows, key=lambda row: float(row["mjd"])) for key, rows in groups.items()}
