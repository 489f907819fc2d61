"""What pulsating stars of each type look like: the prior knowledge that tells types and aliases apart."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

import numpy as np

from reduce.records import Floats

I_PER_V = 0.62
"""Amplitude in I relative to V (common practice)."""
OUTSIDE = 1e-30
"""Density per dex of periods that no star of the type has."""
BROAD = 0.02
"""Share of stars that are nothing like the median of their type."""


@dataclass(frozen=True, slots=True)
class Shape:
    """A light curve's common shape in mag of V: amplitudes of the harmonics with their errors, (n,)."""

    size: Floats
    err: Floats
    peak_to_peak: float

    def ratio(self, k: int) -> tuple[float, float]:
        """R_k1 and its error."""
        first = max(float(self.size[0]), 1e-6)
        value = float(self.size[k - 1]) / first
        return value, float(np.hypot(self.err[k - 1], value * self.err[0])) / first


@dataclass(frozen=True, slots=True)
class PulsatorType:
    """One mode of pulsation."""

    name: str
    share: float
    """Of the stars of its kind that are not known to be of one mode or the other."""
    first_mag: float
    """Prior standard deviation of both coefficients of the first harmonic, V."""
    fall: tuple[float, ...]
    """The same of the higher harmonics relative to the one before; the last one holds for all that follow."""
    band_freedom: float
    """Prior standard deviation of a band's own coefficients about the common ones, relative to these (phase lags)."""
    flat_range_d: tuple[float, float] | None
    """Range of periods within which every ln P is as probable as any other; None: as in the catalogue."""

    def harmonic_prior(self, n: int) -> Floats:
        """(2n,) prior standard deviations of the coefficients cos 1, sin 1, cos 2, … in mag of V."""
        steps = [1.0, *(self.fall[min(k, len(self.fall) - 1)] for k in range(n - 1))]
        return np.repeat(self.first_mag * np.cumprod(steps), 2)

    def log_prior(self, period_d: float, shape: Shape) -> float:
        """ln of the density of ln P, the type's share and how usual the shape is at this period."""
        table = _table()[self.name]
        x = math.log10(period_d)
        if self.flat_range_d is None:
            density = float(np.interp(x, table["log_p"], table["density_per_dex"], left=0.0, right=0.0)) + OUTSIDE
        else:
            low, high = (math.log10(edge) for edge in self.flat_range_d)
            density = 1.0 / (high - low) if low <= x <= high else OUTSIDE
        usual = 0.0
        figures = (
            ("a_i", I_PER_V * shape.peak_to_peak, I_PER_V * 2.0 * float(shape.err[0])),
            ("r21", *shape.ratio(2)),
            ("r31", *shape.ratio(3)),
        )
        for name, value, err in figures:
            middle, width = self._expected(name, x)
            usual += _log_mixture(value - middle, math.hypot(width, err))
        return math.log(self.share * density) + usual

    def _expected(self, name: str, log_p: float) -> tuple[float, float]:
        table = _table()[self.name]
        middle, width = (float(np.interp(log_p, table["log_p"], table[key])) for key in (name, f"{name}_sd"))
        return middle, width


def _log_mixture(distance: float, width: float) -> float:
    """ln of a Gaussian with a broad foot, scaled to 1 at its middle where the width is that of the type."""
    return math.log((1.0 - BROAD) * math.exp(-0.5 * (distance / width) ** 2) / width + BROAD)


@cache
def _table() -> dict[str, dict[str, Floats]]:
    text = (files("reduce.candles") / "tables" / "pulsators.csv").read_text(encoding="utf-8")
    rows = list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
    names = sorted({row["type"] for row in rows})
    return {
        name: {
            key: np.array([float(row[key]) for row in rows if row["type"] == name]) for key in rows[0] if key != "type"
        }
        for name in names
    }


FUNDAMENTAL = PulsatorType("fundamental", 0.9, 0.2, (0.5, 0.55, 0.6), 0.25, (1.0, 100.0))
FIRST_OVERTONE = PulsatorType("first overtone", 0.1, 0.12, (0.25, 0.4, 0.6), 0.25, None)
RRAB = PulsatorType("RRab", 0.75, 0.27, (0.5, 0.7, 0.65), 0.1, None)
RRC = PulsatorType("RRc", 0.25, 0.16, (0.2, 0.5, 0.6), 0.1, None)
