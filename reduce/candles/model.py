"""The type Ia model: absolute magnitudes, templates, K-corrections, dust and scatter from ``tables/``.

    m_X(t) = mu + M_X(D) + T_X(p, D) + K_X(z, p) + R_X(z) E_host + Rmw_X E_MW,    p = (t - t_max)/(1 + z)

``tables/README.md`` says where the tables come from.
"""

from __future__ import annotations

import json
import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace
from functools import cache
from importlib.resources import files
from typing import Any

import numpy as np
from scipy.interpolate import RectBivariateSpline

from reduce.records import Floats

BandRows = tuple[tuple[str, slice], ...]
"""Bands of an array of points that is ordered by band, then time, with the rows of each."""

FIRST_PHASE, LAST_PHASE = -13.0, 70.0
"""Points are used between these rest-frame days."""
BEFORE_SLOPE, AFTER_SLOPE = 0.15, 0.02
"""Linear continuation outside the tables, mag per day; only met while t_max is still being looked for."""
BEFORE_SCATTER, AFTER_SCATTER = 0.08, 0.01
"""What that continuation adds to the scatter, mag per day."""


@dataclass(frozen=True)
class Prior:
    """Two-piece normal prior of the decline rate, and the exponential scale of host dust."""

    dm15_mode: float
    dm15_sigma_low: float
    dm15_sigma_high: float
    dm15_range: tuple[float, float]
    e_host_scale: float

    def ln_dm15(self, dm15: Floats) -> Floats:
        """Log prior of Δm15, up to a constant."""
        x = dm15 - self.dm15_mode
        return -0.5 * np.where(x < 0, x / self.dm15_sigma_low, x / self.dm15_sigma_high) ** 2


@dataclass(frozen=True)
class Scatter:
    """How far real supernovae differ from the templates (mag)."""

    grey: float
    colour: Mapping[str, float]
    correlation_days: float
    between_bands: float
    nugget: float
    zero_point: float


@dataclass(frozen=True)
class Validity:
    """Ranges that were calibrated."""

    dm15: tuple[float, float]
    e_host_most: float


@dataclass(frozen=True)
class TypeIaModel:
    """The tables as functions; build it with `type_ia_model`."""

    bands: tuple[str, ...]
    phases: Floats
    """Tabulated rest-frame days, 1 d apart."""
    dm15_nodes: Floats
    templates: Mapping[str, Floats]
    """Band → T of shape (phase, Δm15)."""
    splines: Mapping[str, RectBivariateSpline]
    template_scatter: Mapping[str, Floats]
    k_splines: Mapping[str, RectBivariateSpline]
    absolute_coefficients: Mapping[str, tuple[float, ...]]
    host_coefficients: Mapping[str, tuple[float, float]]
    mw_coefficients: Mapping[str, float]
    prior: Prior
    scatter: Scatter
    validity: Validity

    def without(self, priors: Collection[str]) -> TypeIaModel:
        """The same model with some of `assumptions.PRIORS` switched off: dust, Δm15 flat, no grey scatter."""
        prior, scatter = self.prior, self.scatter
        if "dust" in priors:
            prior = replace(prior, e_host_scale=math.inf)
        if "dm15" in priors:
            prior = replace(prior, dm15_sigma_low=math.inf, dm15_sigma_high=math.inf)
        if "grey" in priors:
            scatter = replace(scatter, grey=0.0)
        return replace(self, prior=prior, scatter=scatter)

    def absolute_mag(self, band: str, dm15: Floats | float) -> Floats:
        """M_X at the time of B maximum, without host dust, on H0 = 73.04."""
        coefficients = self.absolute_coefficients[band]
        return np.asarray(np.polynomial.polynomial.polyval(np.asarray(dm15) - 1.1, coefficients), float)

    def k_correction(self, band: str, z: float, phase: Floats) -> Floats:
        """K_X(z, phase) in mag, observed minus rest; held at the ends of the table."""
        return np.asarray(self.k_splines[band](np.full(phase.shape, z), phase, grid=False), np.float64)

    def host_coefficient(self, band: str, z: float) -> float:
        """Extinction in band X per mag of host E(B-V)."""
        constant, slope = self.host_coefficients[band]
        return constant + slope * z

    def standard_mag(self, band: str, phase: Floats, dm15: Floats, z: float) -> Floats:
        """M_X(D) + T_X(p, D) + K_X(z, p), shape (phase, Δm15); both arguments must ascend."""
        inside = np.clip(phase, self.phases[0], self.phases[-1])
        outside = BEFORE_SLOPE * np.maximum(self.phases[0] - phase, 0.0)
        outside += AFTER_SLOPE * np.maximum(phase - self.phases[-1], 0.0)
        by_phase = self.k_correction(band, z, inside) + outside
        shape = np.asarray(self.splines[band](inside, dm15), float)
        mag: Floats = shape + self.absolute_mag(band, dm15)[None, :] + by_phase[:, None]
        return mag

    def standard_mags(self, bands: BandRows, phase: Floats, dm15: Floats, z: float) -> Floats:
        """`standard_mag` for points of several bands, shape (points, Δm15)."""
        out = np.empty((len(phase), len(dm15)))
        for band, rows in bands:
            out[rows] = self.standard_mag(band, phase[rows], dm15, z)
        return out

    def shape_scatter(self, bands: BandRows, phase: Floats) -> Floats:
        """Template scatter σ_X(p) of each point, mag."""
        sigma = np.empty(len(phase))
        for band, rows in bands:
            sigma[rows] = np.interp(phase[rows], self.phases, self.template_scatter[band])
        sigma += BEFORE_SCATTER * np.maximum(self.phases[0] - phase, 0.0)
        sigma += AFTER_SCATTER * np.maximum(phase - self.phases[-1], 0.0)
        return sigma


def _rows(name: str, fields: list[tuple[str, str]]) -> Any:
    text = (files("reduce.candles") / "tables" / name).read_text(encoding="utf-8")
    body = [line for line in text.splitlines() if not line.startswith("#")][1:]
    return np.loadtxt(body, dtype=fields)


@cache
def type_ia_model() -> TypeIaModel:
    """The model of the shipped tables, read once a process."""
    text = (files("reduce.candles") / "tables" / "type_ia_params.json").read_text(encoding="utf-8")
    params = json.loads(text)
    bands: tuple[str, ...] = tuple(params["bands"])
    table = _rows(
        "type_ia_templates.ecsv",
        [("band", "U1"), ("dm15", "f8"), ("phase", "f8"), ("T", "f8"), ("sigma", "f8")],
    )
    k_table = _rows("k_corrections.ecsv", [("band", "U1"), ("z", "f8"), ("phase", "f8"), ("K", "f8")])
    dm15, phases = np.unique(table["dm15"]), np.unique(table["phase"])
    z, k_phases = np.unique(k_table["z"]), np.unique(k_table["phase"])
    templates, sigma, k_values = {}, {}, {}
    for band in bands:
        rows = table[table["band"] == band]
        templates[band] = np.ascontiguousarray(rows["T"].reshape(len(dm15), len(phases)).T)
        sigma[band] = np.array(rows["sigma"][: len(phases)])
        k_values[band] = k_table[k_table["band"] == band]["K"].reshape(len(z), len(k_phases))
    scatter, dust, prior = params["scatter"], params["host_dust"], params["dm15_prior"]
    valid = params["validity"]
    return TypeIaModel(
        bands=bands,
        phases=phases,
        dm15_nodes=dm15,
        templates=templates,
        splines={band: RectBivariateSpline(phases, dm15, templates[band]) for band in bands},
        template_scatter=sigma,
        k_splines={band: RectBivariateSpline(z, k_phases, k_values[band], kx=1, ky=1) for band in bands},
        absolute_coefficients={band: tuple(params["M_abs"]["coef"][band]) for band in bands},
        host_coefficients={band: (dust["R"][band], dust["dR_dz"][band]) for band in bands},
        mw_coefficients={band: params["mw_dust"]["R"][band] for band in bands},
        prior=Prior(
            prior["mode"],
            prior["sigma_low"],
            prior["sigma_high"],
            (prior["lo"], prior["hi"]),
            dust["prior_scale"],
        ),
        scatter=Scatter(
            scatter["grey"],
            scatter["colour"],
            scatter["corr_days"],
            scatter["corr_between_bands"],
            scatter["nugget"],
            scatter["zp_error"],
        ),
        validity=Validity((valid["dm15"][0], valid["dm15"][1]), valid["E_host"][1]),
    )
