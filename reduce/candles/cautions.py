"""Named warnings that go with a type Ia fit, each with its evidence."""

from __future__ import annotations

from reduce.candles.solve import Solved
from reduce.records import Caution, LightCurve, Target

LATE_START_D = 8.0
LARGEST_Z = 0.08
"""The K-corrections reach 0.1, but the calibrating supernovae thin out beyond this."""
LARGEST_CHI2 = 2.0
LARGEST_REJECTED = 0.15


def input_cautions(curve: LightCurve, target: Target, model_bands: tuple[str, ...]) -> list[Caution]:
    """The warnings that need no fit."""
    found = []
    if target.spectroscopic_type is None:
        found.append(Caution("type_assumed", "no spectroscopic type is known; a normal type Ia is assumed."))
    if target.z is None:
        found.append(Caution("redshift_unknown", "no redshift is known; it is taken as 0."))
    if target.ebv_mw is None:
        found.append(
            Caution(
                "reddening_unknown",
                "the Milky Way's E(B−V) is unknown and not corrected: μ may be too high by 1.1 E(B−V).",
            )
        )
    unknown = sorted(set(curve.band.tolist()) - set(model_bands))
    if unknown:
        found.append(Caution("band_ignored", f"the model knows no band {', '.join(unknown)}."))
    return found


def cautions(curve: LightCurve, target: Target, solved: Solved) -> tuple[Caution, ...]:
    """All that the observer should know before trusting the estimate."""
    data, model = solved.data, solved.data.model
    found = input_cautions(curve, target, model.bands)
    _, e, t_max, dm15 = (float(value) for value in solved.mean)
    phase = data.phase(solved.system.points.mjd, t_max)
    first, last = float(phase.min()), float(phase.max())
    bands = [band for band, _ in solved.system.points.bands]
    if first > LATE_START_D:
        found.append(Caution("late_start", f"the first point is {first:.0f} d after maximum: t_max is uncertain."))
    if last < 0:
        found.append(Caution("before_maximum", f"the last point is {-last:.0f} d before the fitted maximum."))
    if len(bands) == 1:
        found.append(Caution("single_band", f"only {bands[0]} is there: host dust is assumed, not measured."))
    if not {"B", "g"} & set(bands):
        found.append(Caution("no_B_or_g", f"only {', '.join(bands)}: host dust is weakly constrained."))
    low, high = model.validity.dm15
    if not low <= dm15 <= high:
        found.append(Caution("dm15_outside", f"Δm15 = {dm15:.2f} is outside {low} to {high}."))
    if e > model.validity.e_host_most:
        found.append(Caution("high_extinction", f"host E(B−V) = {e:.2f}: the host's own R_V matters."))
    if solved.chi2 > LARGEST_CHI2 * len(solved.system):
        per_point = solved.chi2 / len(solved.system)
        found.append(Caution("bad_chi2", f"χ² is {per_point:.1f} per point: perhaps no normal type Ia."))
    if solved.n_rejected > LARGEST_REJECTED * len(data.mags):
        found.append(Caution("many_rejected", f"{solved.n_rejected} of {len(data.mags)} points do not fit."))
    if target.z is not None and not 0.0 <= target.z <= LARGEST_Z:
        found.append(Caution("z_outside", f"z = {target.z:.3f} is outside 0 to {LARGEST_Z}."))
    return tuple(found)
