"""What Cepheids and RR Lyrae stars share: from points to period, mean magnitudes, mode and an estimate."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from reduce.candles.budget import total_error
from reduce.candles.fourier import BandFit, coverage, fit_bands
from reduce.candles.period import FineModel, PeriodSearch, alias_note, search_period
from reduce.candles.population import PulsatorType
from reduce.candles.reddening import EXTINCTION_PER_SFD
from reduce.candles.series import BAND_SIZE, Series, series_of
from reduce.records import (
    ApparentModulus,
    BandMean,
    BudgetLine,
    Caution,
    Estimate,
    FitCurve,
    FitPoint,
    Floats,
    LightCurve,
    PeriodAlias,
    Pulsation,
    Target,
    TargetKind,
)

CERTAIN_ENOUGH = 0.9
"""A less probable period gives no distance."""
WORTH_A_WARNING = 0.99
LEAST_EVIDENCE = 8.0
"""ln of the odds against a star that only scatters."""
LEAST_LISTED = 0.001
MOST_LISTED = 8
DEFAULT_ERR_BAND = 0.02
"""Zero-point error of a band where the points state none (common practice)."""
FARTHEST_MAG = (1.4, 0.8)
"""Brighter and fainter than the median in V; the largest catalogued amplitudes are about 1.5 mag."""
LARGEST_SCATTER = 0.2
"""Of the amplitude; more is no single star's pulsation."""
LEAST_NIGHTS = 6
N_DRAWN = 101


@dataclass(frozen=True, slots=True)
class Kind:
    """What a kind of star is searched for."""

    name: TargetKind
    types: tuple[PulsatorType, ...]
    shortest_d: float
    longest_d: float


@dataclass(frozen=True, slots=True)
class Star:
    """What the light curve says before any relation."""

    target: Target
    period_d: float
    period_err_d: float
    mode: str
    means: Mapping[str, BandMean]


@dataclass(frozen=True, slots=True)
class Distance:
    """What a relation says; ``mu`` None with the reason in ``verdict``."""

    mu: float | None
    verdict: str
    scale: str = ""
    relation: str = ""
    provenance: str = ""
    moduli: tuple[ApparentModulus, ...] = ()
    budget: tuple[BudgetLine, ...] = ()
    warnings: tuple[Caution, ...] = ()


def estimate(curve: LightCurve, target: Target, kind: Kind, distance: Callable[[Star], Distance]) -> Estimate:
    """Search the period, fit the bands, and let the relation of the kind speak."""
    known = tuple(BAND_SIZE)
    ignored = sorted(set(curve.band.tolist()) - set(known))
    warnings = [Caution("band_ignored", f"nothing is known of band {', '.join(ignored)}.")] if ignored else []
    series = _of_one_star(series_of(curve, known))
    search = search_period(series, kind.shortest_d, kind.longest_d, kind.types)
    if search is None:
        why = f"cannot tell yet: {len(series)} usable points over {series.span_d:.1f} d are too few for a period."
        return _estimate(target, kind, why, tuple(warnings), n=len(series))
    if search.log_evidence < LEAST_EVIDENCE:
        why = "cannot tell yet: the points vary no more than their scatter explains, no period stands out."
        return _estimate(target, kind, why, tuple(warnings), n=len(series))
    return _with_period(curve, series, target, kind, search, warnings, distance)


def _of_one_star(series: Series) -> Series:
    """Without points that lie further from their band's median than any pulsation can take a star."""
    keep = np.ones(len(series), bool)
    for band in series.bands:
        mine = series.band == band
        away = (series.mag[mine] - np.median(series.mag[mine])) / BAND_SIZE[band]
        keep[mine] = (away > -FARTHEST_MAG[0]) & (away < FARTHEST_MAG[1])
    return series.take(keep)


def _estimate(
    target: Target, kind: Kind, verdict: str, warnings: tuple[Caution, ...], n: int, chi2: float | None = None
) -> Estimate:
    return Estimate(
        target=target.name, kind=kind.name, mu=None, mu_err=None, mu_err_fit=None, t_max=None, t_max_err=None,
        dm15=None, dm15_err=None, e_host=None, e_host_err=None, chi2=chi2, n=n, verdict=verdict, scale="",
        warnings=warnings,
    )  # fmt: skip


def _with_period(
    curve: LightCurve,
    series: Series,
    target: Target,
    kind: Kind,
    search: PeriodSearch,
    warnings: list[Caution],
    distance: Callable[[Star], Distance],
) -> Estimate:
    best = search.best
    period = 1.0 / best.frequency
    period_err = best.error * period**2
    mode = next(each for each in kind.types if each.name == best.mode)
    fits, keep = fit_bands(series, FineModel(series, mode), best.frequency)
    means = {fit.band: fit.record(_err_band(curve, series, fit.band)) for fit in fits}
    aliases = _aliases(search, series)
    warnings += _cautions(series, fits, means, aliases, search)
    star = Star(target, period, period_err, mode.name, means)
    found = distance(star)
    residual, sigma = _residuals(series, fits)
    pulsation = Pulsation(
        period_d=period, period_err_d=period_err, mode=mode.name, epoch_bjd=_epoch(fits, series),
        coverage=max(coverage((series.time[series.band == b] / period) % 1.0) for b in series.bands),
        aliases=aliases, means=tuple(means.values()), moduli=found.moduli, relation=found.relation,
        provenance=found.provenance,
    )  # fmt: skip
    result = _estimate(
        target,
        kind,
        found.verdict,
        (*warnings, *found.warnings),
        len(series),
        float(np.sum((residual / sigma)[keep] ** 2)),
    )
    result = replace(
        result, pulsation=pulsation, scale=found.scale, curves=_curves(curve, series, fits, pulsation),
        points=_points(curve, series, residual, sigma, keep, pulsation),
    )  # fmt: skip
    if best.probability < CERTAIN_ENOUGH:
        others = " or ".join(f"{alias.period_d:.5g} d ({100 * alias.probability:.0f} %)" for alias in aliases[:3])
        return replace(result, verdict=f"cannot tell yet: the period may be {others}.")
    if period > series.span_d:
        why = f"cannot tell yet: the points span {series.span_d:.3g} d, the period is about as long or longer."
        return replace(result, verdict=why)
    if found.mu is None:
        return result
    whole = total_error(found.budget)
    own = total_error(line for line in found.budget if line.component != "single star")
    return replace(result, mu=found.mu, mu_err=whole, mu_err_fit=own, budget=found.budget)


def _err_band(curve: LightCurve, series: Series, band: str) -> float:
    stated = curve.err_band[series.row[series.band == band]]
    stated = stated[np.isfinite(stated)]
    return float(np.median(stated)) if len(stated) else DEFAULT_ERR_BAND


def _aliases(search: PeriodSearch, series: Series) -> tuple[PeriodAlias, ...]:
    best = search.best.frequency
    found = []
    for place, each in enumerate(search.candidates[:MOST_LISTED]):
        if each.probability >= LEAST_LISTED:
            note = alias_note(each.frequency, best, 1.0 / series.span_d) if place else ""
            found.append(PeriodAlias(1.0 / each.frequency, each.probability, note))
    return tuple(found)


def _cautions(
    series: Series,
    fits: Sequence[BandFit],
    means: Mapping[str, BandMean],
    aliases: Sequence[PeriodAlias],
    search: PeriodSearch,
) -> list[Caution]:
    found = []
    if search.best.probability < WORTH_A_WARNING and len(aliases) > 1:
        words = ", ".join(
            f"{alias.period_d:.5g} d {100 * alias.probability:.1f} %" + (f" ({alias.note})" if alias.note else "")
            for alias in aliases[:4]
        )
        found.append(Caution("period_ambiguous", f"{words}."))
    if search.best.mode_probability < WORTH_A_WARNING:
        share = 100.0 * search.best.mode_probability
        found.append(Caution("mode_assumed", f"period and shape make it {search.best.mode} by {share:.0f} %."))
    poor = [mean for mean in means.values() if not mean.covered]
    if poor:
        words = ", ".join(f"{mean.band} ({mean.n} points, phase gap {mean.largest_gap:.2f})" for mean in poor)
        found.append(Caution("phase_coverage", f"mean magnitudes lean on the usual shape in {words}."))
    wild = [fit for fit in fits if fit.scatter > LARGEST_SCATTER * fit.amplitude()]
    if wild:
        words = ", ".join(f"{fit.band} {fit.scatter:.2f} mag" for fit in wild)
        found.append(Caution("scatter", f"the points scatter more than their errors say: {words}."))
    nights = len(set(np.floor(series.time).tolist()))
    if nights < LEAST_NIGHTS:
        found.append(Caution("few_nights", f"only {nights} nights: cycles between them may be counted wrong."))
    return found


def _epoch(fits: Sequence[BandFit], series: Series) -> float:
    """Maximum light in the band with the most points, at the cycle nearest to the middle of the series."""
    fit = max(fits, key=lambda each: (each.n, each.band))
    times = fit.time0 + fit.period_d * np.linspace(0.0, 1.0, 1000, endpoint=False)
    peak = float(times[int(np.argmin(fit.at(times)[0]))])
    middle = 0.5 * float(series.time[0] + series.time[-1])
    return peak + fit.period_d * round((middle - peak) / fit.period_d)


def _residuals(series: Series, fits: Sequence[BandFit]) -> tuple[Floats, Floats]:
    residual, sigma = np.empty(len(series)), np.empty(len(series))
    for fit in fits:
        mine = series.band == fit.band
        residual[mine] = series.mag[mine] - fit.at(series.time[mine])[0]
        sigma[mine] = np.sqrt(series.err[mine] ** 2 + series.err_night[mine] ** 2 + fit.scatter**2)
    return residual, sigma


def _points(
    curve: LightCurve,
    series: Series,
    residual: Floats,
    sigma: Floats,
    keep: NDArray[np.bool_],
    pulsation: Pulsation,
) -> tuple[FitPoint, ...]:
    phase_d = (series.time - pulsation.epoch_bjd) % pulsation.period_d
    return tuple(
        FitPoint(
            str(series.night[i]), str(series.band[i]), float(curve.mjd[series.row[i]]), float(phase_d[i]),
            float(residual[i]), float(sigma[i]), not bool(keep[i]),
        )
        for i in range(len(series))
    )  # fmt: skip


def _curves(curve: LightCurve, series: Series, fits: Sequence[BandFit], pulsation: Pulsation) -> tuple[FitCurve, ...]:
    """One cycle from the epoch on, in MJD: barycentric time differs from UTC by what it does at the nearest point."""
    times = pulsation.epoch_bjd + pulsation.period_d * np.linspace(0.0, 1.0, N_DRAWN)
    nearest = int(np.argmin(np.abs(series.time - pulsation.epoch_bjd)))
    to_mjd = float(curve.mjd[series.row[nearest]] - series.time[nearest])
    return tuple(FitCurve(fit.band, times + to_mjd, *fit.at(times)) for fit in fits)


def dust(target: Target, band: str) -> float | None:
    """A_X of the Milky Way in mag, None when its reddening is unknown."""
    if target.ebv_mw is None:
        return None
    sfd = target.ebv_mw if target.ebv_scale == "SFD" else target.ebv_mw / 0.86
    return EXTINCTION_PER_SFD[band] * sfd


def apparent_error(mean: BandMean) -> float:
    """Error of a mean magnitude with its zero point."""
    return math.hypot(mean.err, mean.err_band)
