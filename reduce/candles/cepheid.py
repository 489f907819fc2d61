"""Distance of a classical Cepheid from its period and mean magnitudes (Leavitt & Pickering 1912)."""

from __future__ import annotations

import math

from reduce.candles import pulsator
from reduce.candles.budget import total_error
from reduce.candles.population import FIRST_OVERTONE, FUNDAMENTAL
from reduce.candles.pulsator import Distance, Kind, Star
from reduce.candles.reddening import RELATIVE_MAP_ERROR, milky_way_extinction
from reduce.candles.relations import Calibration, Relation, calibration_for, wesenheit
from reduce.records import ApparentModulus, BudgetLine, Caution, Estimate, LightCurve, Target

KIND = Kind("cepheid", (FUNDAMENTAL, FIRST_OVERTONE), 0.8, 110.0)
LONGEST_D = 100.0
"""Longer periods leave the straight relation."""
R_ERROR = 0.1
"""Of R = A_I / E(V-I) = 1.55 among sight lines (common practice)."""
UNKNOWN_METAL_ERR = 0.3
"""dex, of a star of unknown metallicity (common practice)."""
DEFAULT_METAL_ERR = 0.1
HOST_DUST_EBV = 0.1
"""E(B-V) that a single band cannot see (common practice)."""


def fit(curve: LightCurve, target: Target) -> Estimate:
    """Period, mean magnitudes, apparent moduli in every band, and μ from the reddening-free index of V and I.

    Without V and I, μ comes from the reddest band that has a relation, and says what dust may hide.
    """
    return pulsator.estimate(curve, target, KIND, distance)


def distance(star: Star) -> Distance:
    """The moduli of a star whose period and mean magnitudes are known."""
    moduli = _apparent_moduli(star)
    if {"V", "I"} <= set(star.means):
        return _by_index(star, moduli)
    return _by_one_band(star, moduli)


def _relation(calibration: Calibration | None, band: str, mode: str) -> Relation | None:
    if calibration is None:
        return None
    return (calibration.overtone if mode == FIRST_OVERTONE.name else calibration.bands).get(band)


def _metal(star: Star, calibration: Calibration) -> tuple[float, float, float]:
    """γ ([O/H] - [O/H] of the calibration), its error from the star's metallicity, its error from γ."""
    known = star.target.metallicity_dex
    if known is None:
        return 0.0, abs(calibration.gamma) * UNKNOWN_METAL_ERR, 0.0
    err = DEFAULT_METAL_ERR if star.target.metallicity_err is None else star.target.metallicity_err
    away = known - calibration.metal_at
    return (
        calibration.gamma * away,
        abs(calibration.gamma) * math.hypot(err, calibration.metal_at_err),
        calibration.gamma_err * abs(away),
    )


def _apparent_moduli(star: Star) -> list[ApparentModulus]:
    found = []
    for band, mean in star.means.items():
        calibration = calibration_for("cepheid", band, star.target.relation)
        relation = _relation(calibration, band, star.mode)
        if calibration is None or relation is None:
            continue
        mu = mean.mag - relation.absolute_mag(math.log10(star.period_d), 0.0)
        err = math.hypot(pulsator.apparent_error(mean), math.hypot(relation.scatter, calibration.zero_err))
        found.append(ApparentModulus(band, mu, err, calibration.name, "apparent, dust not taken off"))
    return found


def _limits(star: Star, calibration: Calibration) -> list[Caution]:
    found = []
    if not calibration.shortest_d <= star.period_d <= LONGEST_D and star.mode == FUNDAMENTAL.name:
        found.append(
            Caution(
                "period_outside",
                f"{star.period_d:.3g} d is outside {calibration.shortest_d:g} to {LONGEST_D:g} d, {calibration.name}.",
            )
        )
    if star.target.metallicity_dex is None:
        at = f"{calibration.metal_at:+.2f}"
        found.append(Caution("metallicity_unknown", f"taken as that of the calibration, [O/H] = {at}."))
    wanted = star.target.relation
    if wanted is not None and wanted != calibration.name:
        found.append(Caution("relation_not_used", f"{wanted} does not serve here; {calibration.name} is used."))
    return found


def _by_index(star: Star, moduli: list[ApparentModulus]) -> Distance:
    calibration = calibration_for("cepheid", "W", star.target.relation)
    relation = _relation(calibration, "W", star.mode)
    if calibration is not None and relation is None:
        calibration = calibration_for("cepheid", "W", None)
        relation = _relation(calibration, "W", star.mode)
    if calibration is None or relation is None or relation.r is None:
        return Distance(None, f"cannot tell: no relation for a {star.mode} Cepheid.", moduli=tuple(moduli))
    v, i, r = star.means["V"], star.means["I"], relation.r
    log_p = math.log10(star.period_d)
    correction, metal_err, gamma_err = _metal(star, calibration)
    mu = wesenheit(v.mag, i.mag, r) - relation.absolute_mag(log_p, 0.0) - correction
    excess = _colour_excess(star, v.mag - i.mag)
    dlog = star.period_err_d / star.period_d / math.log(10.0)
    budget = (
        BudgetLine("mean magnitudes", math.hypot(r * v.err, (1 + r) * i.err), f"{v.n} V and {i.n} I points"),
        BudgetLine("band zero points", math.hypot(r * v.err_band, (1 + r) * i.err_band), "shared by all nights"),
        BudgetLine("period", abs(relation.slope) * dlog, f"{star.period_d:.6g} ± {star.period_err_d:.2g} d"),
        BudgetLine("metallicity", metal_err, _metal_note(star, calibration, correction)),
        BudgetLine(
            "metallicity term", gamma_err, f"γ = {calibration.gamma:+.2f} ± {calibration.gamma_err:.2f} mag/dex"
        ),
        BudgetLine("reddening law", R_ERROR * abs(excess), f"R = {r:.2f} ± {R_ERROR:.1f}, E(V−I) {excess:+.2f}"),
        BudgetLine("calibration", calibration.zero_err, calibration.anchor),
        BudgetLine("single star", relation.scatter, "width of the relation"),
    )
    whole = total_error(budget)
    moduli = [*moduli, ApparentModulus("W", mu, whole, calibration.name, f"free of dust, R = {r:.2f}")]
    warnings = tuple(_limits(star, calibration))
    scale = f"{calibration.name}: {calibration.anchor}"
    return Distance(mu, "μ stands", scale, calibration.name, calibration.provenance, tuple(moduli), budget, warnings)


def _metal_note(star: Star, calibration: Calibration, correction: float) -> str:
    if star.target.metallicity_dex is None:
        return f"unknown, ±{UNKNOWN_METAL_ERR} dex allowed, not corrected"
    return f"[O/H] {star.target.metallicity_dex:+.2f}, calibration {calibration.metal_at:+.2f}: {-correction:+.3f} mag"


def _colour_excess(star: Star, colour: float) -> float:
    """E(V-I) from the two relations of the default calibration."""
    calibration = calibration_for("cepheid", "V", None)
    if calibration is None:
        return 0.0
    log_p = math.log10(star.period_d)
    return colour - (calibration.bands["V"].absolute_mag(log_p, 0.0) - calibration.bands["I"].absolute_mag(log_p, 0.0))


def _by_one_band(star: Star, moduli: list[ApparentModulus]) -> Distance:
    usable = [each for band in ("I", "R", "V", "B") for each in moduli if each.band == band]
    if not usable:
        bands = ", ".join(star.means) or "no band"
        return Distance(None, f"cannot tell: no relation for a {star.mode} Cepheid in {bands}; V and I are wanted.")
    band = usable[0].band
    calibration = calibration_for("cepheid", band, star.target.relation)
    relation = _relation(calibration, band, star.mode)
    assert calibration is not None  # _apparent_moduli found both
    assert relation is not None
    mean = star.means[band]
    correction, metal_err, gamma_err = _metal(star, calibration)
    milky_way = pulsator.dust(star.target, band) or 0.0
    hidden = milky_way_extinction(band, HOST_DUST_EBV, "SF11")
    dlog = star.period_err_d / star.period_d / math.log(10.0)
    budget = (
        BudgetLine("mean magnitudes", mean.err, f"{mean.n} {band} points"),
        BudgetLine("band zero points", mean.err_band, "shared by all nights"),
        BudgetLine("period", abs(relation.slope) * dlog, f"{star.period_d:.6g} ± {star.period_err_d:.2g} d"),
        BudgetLine("metallicity", metal_err, _metal_note(star, calibration, correction)),
        BudgetLine(
            "metallicity term", gamma_err, f"γ = {calibration.gamma:+.2f} ± {calibration.gamma_err:.2f} mag/dex"
        ),
        BudgetLine("Milky Way dust", RELATIVE_MAP_ERROR * milky_way, f"A_{band} {milky_way:.2f}"),
        BudgetLine("dust of the host", hidden, f"one band cannot see it; E(B−V) of {HOST_DUST_EBV} allowed"),
        BudgetLine("calibration", calibration.zero_err, calibration.anchor),
        BudgetLine("single star", relation.scatter, "width of the instability strip"),
    )
    warnings = _limits(star, calibration)
    warnings.append(Caution("no_V_and_I", f"μ comes from {band} alone: dust in the host makes it too large."))
    if star.target.ebv_mw is None:
        warnings.append(Caution("reddening_unknown", "the Milky Way's E(B−V) is unknown and not corrected."))
    mu = usable[0].mag - milky_way - correction
    scale = f"{calibration.name}: {calibration.anchor}"
    return Distance(
        mu, "μ stands", scale, calibration.name, calibration.provenance, tuple(moduli), budget, tuple(warnings)
    )
