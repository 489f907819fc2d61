"""What every standard candle offers, and which one a kind of target gets."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

from reduce.candles.assumptions import Assumptions
from reduce.records import Estimate, LightCurve, Target, TargetKind


class Candle(Protocol):
    """Turns a light curve into an estimate of the distance modulus."""

    def fit(self, curve: LightCurve, target: Target) -> Estimate:
        """Estimate from all points at once; a running estimate refits them all."""
        ...


@dataclass(frozen=True, slots=True)
class TypeIa:
    """Type Ia supernovae by decline rate."""

    assumptions: Assumptions = field(default_factory=Assumptions)

    def fit(self, curve: LightCurve, target: Target) -> Estimate:
        """See `reduce.candles.type_ia.fit`."""
        from reduce.candles import type_ia  # here, because it brings scipy

        return type_ia.fit(curve, target, self.assumptions)


@dataclass(frozen=True, slots=True)
class Cepheid:
    """Classical Cepheids by period and luminosity."""

    def fit(self, curve: LightCurve, target: Target) -> Estimate:
        """See `reduce.candles.cepheid.fit`."""
        from reduce.candles import cepheid

        return cepheid.fit(curve, target)


@dataclass(frozen=True, slots=True)
class RRLyrae:
    """RR Lyrae stars by metallicity and luminosity."""

    def fit(self, curve: LightCurve, target: Target) -> Estimate:
        """See `reduce.candles.rr_lyrae.fit`."""
        from reduce.candles import rr_lyrae

        return rr_lyrae.fit(curve, target)


@dataclass(frozen=True, slots=True)
class NoRelation:
    """A kind whose distance relation is not there."""

    kind: TargetKind

    def fit(self, curve: LightCurve, target: Target) -> Estimate:
        """An estimate that says so."""
        return Estimate(
            target=target.name, kind=self.kind, mu=None, mu_err=None, mu_err_fit=None,
            t_max=None, t_max_err=None, dm15=None, dm15_err=None, e_host=None, e_host_err=None,
            chi2=None, n=0, verdict="no distance relation for this kind yet", scale="",
        )  # fmt: skip


def candle_for(kind: TargetKind, assumptions: Assumptions | None = None) -> Candle:
    """The candle of a kind of target; ``assumptions`` are those of type Ia."""
    by_kind: dict[TargetKind, Candle] = {"cepheid": Cepheid(), "rr_lyrae": RRLyrae()}
    if kind == "type_ia":
        return TypeIa(assumptions or Assumptions())
    return by_kind.get(kind) or NoRelation(kind)
