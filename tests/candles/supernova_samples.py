"""Public light curves of real supernovae, of type Ia and not, cut and counted for the tests of the distance room.

Type Ia: photometry and moduli of the Pantheon+/SH0ES release (Scolnic et al. 2022, ApJ 938, 113; Brout et al. 2022,
ApJ 938, 110). Not of type Ia: the Open Supernova Catalog and compilations of stripped-envelope supernovae, as their
table says. All files are found through FADELINE_REFERENCE and stay outside the project.
"""

from __future__ import annotations

import csv
import hashlib
from collections import defaultdict
from pathlib import Path

import numpy as np
from candle_light_curves import light_curve, real_curve, taken

from reduce.candles.distance import hubble_modulus, peculiar_velocity_modulus_error
from reduce.records import Target

LEAST_Z = 0.015
GUESSED_ERR = 0.1
"""Error (mag) of photographic points that state none (common practice)."""


def read(path: Path) -> list[dict[str, str]]:
    """Rows of a CSV file."""
    with path.open(encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def is_held_out(name: str) -> bool:
    """The split that was fixed before anything was tuned: half of all names, by the digest of the name."""
    return hashlib.sha256(name.encode()).digest()[0] % 2 == 1


class TypeIaSample:
    """Supernovae of the Hubble flow, one survey each: the one with most points (first by name if equal)."""

    def __init__(self, folder: Path) -> None:
        photometry = defaultdict(list)
        for row in read(folder / "type_ia" / "train_photometry.csv"):
            if float(row["err"]) < 0.3:
                photometry[row["name"], row["survey"]].append(row)
        self.z_hd, self.listed = {}, {}
        for row in read(folder / "type_ia" / "train_distances.csv"):
            self.z_hd[row["name"]], self.listed[row["name"]] = float(row["zHD"]), float(row["MU"])
        surveys = defaultdict(list)
        for name, survey in sorted(photometry):
            surveys[name].append(survey)
        self.rows = {
            name: sorted(
                photometry[name, max(surveys[name], key=lambda survey: len(photometry[name, survey]))],
                key=lambda row: float(row["mjd"]),
            )
            for name in sorted(surveys)
            if self.z_hd.get(name, 0.0) > LEAST_Z
        }

    def names(self, held_out: bool | None = None) -> list[str]:
        """In order; only those held out, or only the others, when asked."""
        return [name for name in self.rows if held_out is None or is_held_out(name) == held_out]

    def curve(self, name: str):
        """(Target, LightCurve)."""
        return real_curve(self.rows[name])

    def hubble(self, name: str) -> tuple[float, float]:
        """Modulus from the redshift of the Hubble flow, and what peculiar velocities (250 km/s) put on it."""
        z = self.z_hd[name]
        return hubble_modulus(z, j0=1.0), peculiar_velocity_modulus_error(z)


def phases(curve, target, t_max):
    """Rest-frame days."""
    return (curve.mjd - t_max) / (1.0 + target.z)


def only(curve, target, t_max, first=-99.0, last=99.0, bands="BVRIgri"):
    """The points between two phases in some bands."""
    phase = phases(curve, target, t_max)
    return taken(curve, np.flatnonzero((phase >= first) & (phase <= last) & np.isin(curve.band, list(bands))))


def four_nights(curve, name):
    """The points of four nights drawn by the name."""
    seed = int.from_bytes(hashlib.sha256(name.encode()).digest()[:4], "big")
    nights = np.unique(curve.night)
    some = np.random.default_rng(seed).permutation(nights)[:4]
    return taken(curve, np.flatnonzero(np.isin(curve.night, some)))


def not_type_ia(folder: Path):
    """(type, Target, LightCurve) of every supernova that is not of type Ia, in the order of the table."""
    points = defaultdict(list)
    for row in read(folder / "reference" / "variables" / "sn_nonIa_lightcurves.csv"):
        points[row["name"]].append(row)
    for row in read(folder / "reference" / "variables" / "sn_nonIa_table.csv"):
        mine = [p for p in points[row["name"]] if p["mag"]]
        mjd = np.array([float(p["jd"]) - 2400000.5 for p in mine])
        mag = [float(p["mag"]) for p in mine]
        err = [float(p["err"]) if p["err"] and float(p["err"]) > 0 else GUESSED_ERR for p in mine]
        z = float(row["redshift"]) if row["redshift"] else None
        ebv = float(row["ebv_mw"]) if row["ebv_mw"] else None
        yield (
            row["type"],
            Target(row["name"], "type_ia", np.nan, np.nan, z, ebv),
            light_curve(mjd, [p["band"] for p in mine], mag, err),
        )


def robust(values) -> float:
    """1.48 times the median distance from the median."""
    values = np.asarray(values, float)
    return float(1.48 * np.median(np.abs(values - np.median(values)))) if len(values) else float("nan")
