"""Published relations between period, metallicity and luminosity, by name."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib.resources import files
from typing import Literal

MetalScale = Literal["[Fe/H]", "log Z"]
ALPHA_ENHANCEMENT_DEX = 0.3
"""[α/Fe] of old stars (common practice)."""
OVERTONE_TO_FUNDAMENTAL_DEX = 0.127
"""Added to log P of a first-overtone RR Lyrae star (from memory)."""
DEFAULTS = {
    ("cepheid", "W"): "OGLE-III LMC", ("cepheid", "V"): "OGLE-III LMC", ("cepheid", "I"): "OGLE-III LMC",
    ("cepheid", "B"): "Madore & Freedman 1991", ("cepheid", "R"): "Madore & Freedman 1991",
    ("rr_lyrae", "V"): "Muraveva 2018", ("rr_lyrae", "I"): "Catelan 2004", ("rr_lyrae", "i"): "Caceres & Catelan 2008",
}  # fmt: skip
"""(kind, band) → calibration where the target names none, or one without that band."""


@dataclass(frozen=True, slots=True)
class Relation:
    """Absolute magnitude: zero + slope (log P - pivot) + metal (X - metal_at) + metal2 X²."""

    zero: float
    scatter: float
    """Of single stars, mag: width of the instability strip, or of the horizontal branch."""
    slope: float = 0.0
    pivot: float = 0.0
    metal: float = 0.0
    metal_at: float = 0.0
    metal2: float = 0.0
    r: float | None = None
    """Of a Wesenheit index I - r (V - I)."""

    def absolute_mag(self, log_p: float, metal: float) -> float:
        """M of a star; ``metal`` on the calibration's scale."""
        by_metal = self.metal * (metal - self.metal_at) + self.metal2 * metal**2
        return self.zero + self.slope * (log_p - self.pivot) + by_metal

    def per_dex(self, metal: float) -> float:
        """dM/dX at a metallicity."""
        return self.metal + 2.0 * self.metal2 * metal


@dataclass(frozen=True, slots=True)
class Calibration:
    """Relations of one publication and the distance scale they stand on."""

    name: str
    kind: str
    source: str
    checked: str
    anchor: str
    zero_err: float
    bands: Mapping[str, Relation]
    overtone: Mapping[str, Relation] = field(default_factory=dict)
    """Of first-overtone Cepheids."""
    metal_scale: MetalScale = "[Fe/H]"
    metal_at: float = 0.0
    """Mean metallicity of the calibrating Cepheids."""
    metal_at_err: float = 0.0
    gamma: float = 0.0
    """dM/d[O/H] of Cepheids, mag per dex."""
    gamma_err: float = 0.0
    shortest_d: float = 0.0
    """Shorter periods are outside the calibration."""

    @property
    def provenance(self) -> str:
        """Publication and how far its numbers were checked."""
        return f"{self.source}; anchor: {self.anchor}" + ("" if self.checked == "publication" else "; from memory")


def wesenheit(v: float, i: float, r: float) -> float:
    """Reddening-free index W = I - r (V - I) (Madore 1982); r must be that of the relation it is compared with."""
    return i - r * (v - i)


def log_z(fe_h: float, alpha_fe: float = ALPHA_ENHANCEMENT_DEX) -> float:
    """log Z of [Fe/H]: [M/H] - 1.765, [M/H] = [Fe/H] + log(0.638 10^[α/Fe] + 0.362) (Salaris et al. 1993)."""
    return fe_h + math.log10(0.638 * 10.0**alpha_fe + 0.362) - 1.765


@cache
def calibrations() -> dict[str, Calibration]:
    """All calibrations by name."""
    data = tomllib.loads((files("reduce.candles") / "tables" / "relations.toml").read_text(encoding="utf-8"))
    common = data["metallicity"]
    found = {}
    for entry in data["calibration"]:
        fields = dict(entry)
        fields["bands"] = {band: Relation(**values) for band, values in fields["bands"].items()}
        fields["overtone"] = {band: Relation(**values) for band, values in fields.get("overtone", {}).items()}
        if fields["kind"] == "cepheid":
            fields.setdefault("gamma", common["gamma"])
            fields.setdefault("gamma_err", common["gamma_err"])
        found[fields["name"]] = Calibration(**fields)
    return found


def names_for(kind: str) -> tuple[str, ...]:
    """Names of the calibrations of a kind of star, in the order of the table."""
    return tuple(name for name, each in calibrations().items() if each.kind == kind)


def calibration_for(kind: str, band: str, wanted: str | None) -> Calibration | None:
    """The wanted calibration where it has the band, else the default one of the band; None without any."""
    chosen = calibrations().get(wanted or "")
    if chosen is not None and chosen.kind == kind and band in chosen.bands:
        return chosen
    name = DEFAULTS.get((kind, band))
    return calibrations()[name] if name else None
