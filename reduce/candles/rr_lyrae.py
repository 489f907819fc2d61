"""Distance of an RR Lyrae star from its mean magnitudes, metallicity and period."""

from __future__ import annotations

import math

from reduce.candles import pulsator
from reduce.candles.budget import total_error
from reduce.candles.population import RRAB, RRC
from reduce.candles.pulsator import Distance, Kind, Star
from reduce.candles.reddening import RELATIVE_MAP_ERROR, milky_way_extinction
from reduce.candles.relations import OVERTONE_TO_FUNDAMENTAL_DEX, Calibration, calibration_for, log_z
from reduce.records import ApparentModulus, BudgetLine, Caution, Estimate, LightCurve, Target

KIND = Kind("rr_lyrae", (RRAB, RRC), 0.2, 1.0)
DEFAULT_FE_H, DEFAULT_FE_H_ERR = -1.5, 0.4
"""Of a star of unknown metallicity, and its range (common practice)."""
STATED_FE_H_ERR = 0.15
"""Where a metallicity is given without an error (common practice)."""
UNKNOWN_EBV_ERROR = 0.05
BEST_FIRST = ("V", "I", "i")


def fit(curve: LightCurve, target: Target) -> Estimate:
    """Period, type, mean magnitudes, and μ by the named relation in V, I or i, the Milky Way's dust taken off."""
    return pulsator.estimate(curve, target, KIND, distance)


def _metal(target: Target, calibration: Calibration) -> tuple[float, float]:
    """Metallicity on the calibration's scale and its error, dex."""
    if target.metallicity_dex is None:
        fe_h, err = DEFAULT_FE_H, DEFAULT_FE_H_ERR
    else:
        fe_h = target.metallicity_dex
        err = STATED_FE_H_ERR if target.metallicity_err is None else target.metallicity_err
    return (log_z(fe_h) if calibration.metal_scale == "log Z" else fe_h), err


def _fundamental_log_p(star: Star) -> float:
    shift = OVERTONE_TO_FUNDAMENTAL_DEX if star.mode == RRC.name else 0.0
    return math.log10(star.period_d) + shift


def distance(star: Star) -> Distance:
    """The moduli of a star whose period, type and mean magnitudes are known."""
    target = star.target
    found: dict[str, tuple[float, tuple[BudgetLine, ...], Calibration]] = {}
    for band in BEST_FIRST:
        calibration = calibration_for("rr_lyrae", band, target.relation)
        if band in star.means and calibration is not None:
            found[band] = _in_band(star, band, calibration)
    if not found:
        bands = ", ".join(star.means) or "no band"
        return Distance(None, f"cannot tell: no relation for RR Lyrae stars in {bands}; V or I is wanted.")
    moduli = tuple(
        ApparentModulus(band, mu, total_error(lines), calibration.name, "Milky Way dust taken off")
        for band, (mu, lines, calibration) in found.items()
    )
    wanted = [band for band in found if found[band][2].name == target.relation]
    mu, budget, calibration = found[(wanted or list(found))[0]]
    warnings = []
    if target.metallicity_dex is None:
        warnings.append(Caution("metallicity_unknown", f"[Fe/H] = {DEFAULT_FE_H} ± {DEFAULT_FE_H_ERR} is assumed."))
    if target.ebv_mw is None:
        warnings.append(Caution("reddening_unknown", "the Milky Way's E(B−V) is unknown and not corrected."))
    if target.relation is not None and target.relation != calibration.name:
        warnings.append(
            Caution("relation_not_used", f"{target.relation} does not serve here; {calibration.name} is used.")
        )
    scale = f"{calibration.name}: {calibration.anchor}"
    return Distance(mu, "μ stands", scale, calibration.name, calibration.provenance, moduli, budget, tuple(warnings))


def _in_band(star: Star, band: str, calibration: Calibration) -> tuple[float, tuple[BudgetLine, ...], Calibration]:
    mean, relation, target = star.means[band], calibration.bands[band], star.target
    metal, metal_err = _metal(target, calibration)
    milky_way = pulsator.dust(target, band)
    mu = mean.mag - (milky_way or 0.0) - relation.absolute_mag(_fundamental_log_p(star), metal)
    if milky_way is None:
        dust = BudgetLine(
            "Milky Way dust", milky_way_extinction(band, UNKNOWN_EBV_ERROR, "SF11"),
            f"E(B−V) unknown, not corrected; ±{UNKNOWN_EBV_ERROR} allowed",
        )  # fmt: skip
    else:
        dust = BudgetLine(
            "Milky Way dust", RELATIVE_MAP_ERROR * milky_way, f"A_{band} {milky_way:.2f}, map good to 16 %"
        )
    dlog = star.period_err_d / star.period_d / math.log(10.0)
    known = target.metallicity_dex is not None
    lines = (
        BudgetLine("mean magnitudes", mean.err, f"{mean.n} {band} points"),
        BudgetLine("band zero points", mean.err_band, "shared by all nights"),
        BudgetLine("period", abs(relation.slope) * dlog, f"{star.period_d:.6g} ± {star.period_err_d:.2g} d"),
        BudgetLine(
            "metallicity", abs(relation.per_dex(metal)) * metal_err,
            f"[Fe/H] {target.metallicity_dex:+.2f} ± {metal_err:.2f}" if known else "[Fe/H] unknown",
        ),
        dust,
        BudgetLine("calibration", calibration.zero_err, calibration.anchor),
        BudgetLine("single star", relation.scatter, "stars of one metallicity differ in age and state"),
    )  # fmt: skip
    return mu, lines, calibration
