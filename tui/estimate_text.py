"""An estimate as plain lines, for the command line."""

from __future__ import annotations

from reduce.records import Estimate, Pulsation


def _with_error(value: float | None, error: float | None, digits: int) -> str:
    if value is None:
        return "–"
    return f"{value:.{digits}f}" + ("" if error is None else f" ± {error:.{digits}f}")


def _pulsation_lines(estimate: Estimate, star: Pulsation) -> list[str]:
    """Period, aliases, means and moduli of a pulsating star."""
    lines = [
        f"  period {_with_error(star.period_d, star.period_err_d, 6)} d   {star.mode}   "
        f"phase covered {100 * star.coverage:.0f} %   maximum BJD {star.epoch_bjd:.4f}   "
        f"χ² {_with_error(estimate.chi2, None, 1)} of {estimate.n} points"
    ]
    lines += [
        f"  {100 * alias.probability:5.1f} %  {alias.period_d:.6g} d  {alias.note}".rstrip() for alias in star.aliases
    ]
    for mean in star.means:
        shape = "" if mean.r21 is None else f"   R21 {mean.r21:.3f}   φ21 {_with_error(mean.phi21, None, 2)}"
        lines.append(
            f"  <{mean.band}> {_with_error(mean.mag, mean.err, 3)} (zero point {mean.err_band:.3f})   "
            f"amplitude {mean.amplitude_mag:.2f}   {mean.n} points, {mean.order} harmonics, "
            f"phase gap {mean.largest_gap:.2f}{shape}" + ("" if mean.covered else "   not covered")
        )
    lines += [f"  μ_{m.band} {_with_error(m.mag, m.err, 3)}  {m.relation}, {m.note}" for m in star.moduli]
    if star.provenance:
        lines.append(f"  relation: {star.relation} ({star.provenance})")
    return lines


def _posterior_lines(estimate: Estimate) -> list[str]:
    """The interval of 95 % and the strongest correlation."""
    found = estimate.posterior
    if found is None:
        return []
    low, high = found.quantiles[0][0], found.quantiles[0][-1]
    others = [(abs(value), value, name) for value, name in zip(found.correlation[0], found.parameters, strict=True)]
    _, value, name = max(others[1:])
    words = {"e_host": "host E(B−V)", "t_max": "t_max", "dm15": "Δm15"}
    with_what = f"goes most with {words.get(name, name)} (correlation {value:+.2f})"
    return [f"  95 %: μ from {low:.3f} to {high:.3f}; it {with_what}"]


def estimate_lines(estimate: Estimate) -> list[str]:
    """Lines of text: the modulus, its parameters, the budget and every warning with its evidence."""
    mu = "cannot tell yet" if estimate.mu is None else f"μ = {_with_error(estimate.mu, estimate.mu_err, 3)} mag"
    lines = [f"{estimate.target}: {mu}", f"  {estimate.verdict}"]
    if estimate.pulsation is not None:
        lines += _pulsation_lines(estimate, estimate.pulsation)
    elif estimate.n and estimate.kind == "type_ia":
        lines.append(
            f"  t_max MJD {_with_error(estimate.t_max, estimate.t_max_err, 2)}   "
            f"Δm15 {_with_error(estimate.dm15, estimate.dm15_err, 3)}   "
            f"host E(B−V) {_with_error(estimate.e_host, estimate.e_host_err, 3)}   "
            f"χ² {_with_error(estimate.chi2, None, 1)} of {estimate.n} points"
        )
        lines.append("  (χ² allows for all errors and the scatter of real supernovae about the model)")
    if estimate.distance_mpc is not None:
        mpc, up, down = estimate.distance_mpc
        digits = 2 if mpc < 100 else 1
        lines.append(f"  distance {mpc:.{digits}f} +{up:.{digits}f} −{down:.{digits}f} Mpc")
    lines += _posterior_lines(estimate)
    if estimate.scale:
        lines.append(f"  scale: {estimate.scale}")
    lines += [f"  prior {sentence}" for sentence in estimate.priors]
    lines += [
        f"  {offset.source} {offset.band}: {offset.mag:+.3f} ± {offset.err:.3f} mag from the others "
        f"(prior ±{offset.prior_mag:.3f}, {offset.n} points)"
        for offset in estimate.offsets
    ]
    if estimate.hubble is not None:
        h = estimate.hubble
        lines.append(
            f"  beside it, from the {h.frame} redshift {h.z:.5f} alone: μ = {h.mu:.3f} ± {h.mu_err:.3f} "
            "(peculiar velocity)"
        )
    lines += [f"  {line.mag:6.3f} mag  {line.component}  {line.note}".rstrip() for line in estimate.budget]
    lines += [f"  ! {caution.name.replace('_', ' ')}: {caution.evidence}" for caution in estimate.warnings]
    return lines
