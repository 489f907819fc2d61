"""Points and estimates as JSON objects whose keys do not change; unknown numbers are null, never NaN."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

import numpy as np

from reduce.records import Estimate, Point

POINT_KEYS = (
    "star", "file", "night", "band", "mjd", "bjd_tdb", "mag", "err", "err_night", "err_band", "flux",
    "flux_err", "state", "flags", "host_method", "zp_group", "provisional",
)  # fmt: skip

ESTIMATE_KEYS = (
    "name", "mu", "mu_err", "mu_err_fit", "t_max", "t_max_err", "dm15", "dm15_err", "e_host", "e_host_err", "chi2",
    "n", "warnings", "kind", "verdict", "scale", "budget", "peak_mag", "posterior", "priors", "offsets", "hubble",
    "distance_mpc",
)  # fmt: skip

PULSATION_KEYS = (
    "period_d", "period_err_d", "mode", "epoch_bjd", "coverage", "aliases", "means", "moduli", "relation", "provenance",
)  # fmt: skip
"""They follow the others in every estimate: null (lists empty) for a target that does not pulsate."""


def without_nan(value: Any) -> Any:
    """The same value of lists, dicts, numbers and text, with None for numbers that are not finite."""
    if isinstance(value, np.generic | np.ndarray):
        return without_nan(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): without_nan(item) for key, item in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, str):
        return [without_nan(item) for item in value]
    return value


def point_to_json(point: Point) -> dict[str, Any]:
    """Exactly the keys of POINT_KEYS; ``mjd`` UTC at mid-exposure, ``flux`` on zero point 25."""
    return {key: without_nan(getattr(point, key)) for key in POINT_KEYS}


def estimate_to_json(estimate: Estimate) -> dict[str, Any]:
    """The keys of ESTIMATE_KEYS and PULSATION_KEYS; lists hold objects, curves and points are left out."""
    row = {"name": estimate.target, **asdict(estimate)}
    pulsation = row["pulsation"] or {"aliases": [], "means": [], "moduli": []}
    own = {key: without_nan(row[key]) for key in ESTIMATE_KEYS}
    return own | {key: without_nan(pulsation.get(key)) for key in PULSATION_KEYS}
