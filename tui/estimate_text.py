"""An estimate as plain lines, for the command line."""

from __future__ import annotations

from reduce.records import Estimate


def _with_error(value: float | None, error: float | None, digits: int) -> str:
    if value is None:
        return "–"
    return f"{value:.{digits}f}" + ("" if error is None else f" ± {error:.{digits}f}")


def estimate_lines(estimate: Estimate) -> list[str]:
    """Lines of text: the modulus, its parameters, the budget and every warning with its evidence."""
    mu = "cannot tell yet" if estimate.mu is None else f"μ = {_with_error(estimate.mu, estimate.mu_err, 3)} mag"
    lines = [f"{estimate.target}: {mu}", f"  {estimate.verdict}"]
    if estimate.n:
        lines.append(
            f"  t_max MJD {_with_error(estimate.t_max, estimate.t_max_err, 2)}   "
            f"Δm15 {_with_error(estimate.dm15, estimate.dm15_err, 3)}   "
            f"host E(B−V) {_with_error(estimate.e_host, estimate.e_host_err, 3)}   "
            f"χ² {_with_error(estimate.chi2, None, 1)} of {estimate.n} points"
        )
        lines.append("  (χ² allows for all errors and the scatter of real supernovae about the model)")
    if estimate.scale:
        lines.append(f"  scale: {estimate.scale}")
    lines += [f"  {line.mag:6.3f} mag  {line.component}  {line.note}".rstrip() for line in estimate.budget]
    lines += [f"  ! {caution.name.replace('_', ' ')}: {caution.evidence}" for caution in estimate.warnings]
    return lines
