"""Named warnings that go with a type Ia fit, each with its evidence."""

from __future__ import annotations

import math

import numpy as np

from reduce.candles.assumptions import Assumptions
from reduce.candles.doubts import doubts
from reduce.candles.model import TypeIaModel
from reduce.candles.points import SOURCE_OFFSET
from reduce.candles.solve import Solved
from reduce.records import Caution, Floats, LightCurve, Target

LATE_START_D = 8.0
LARGEST_Z = 0.08
"""The K-corrections reach 0.1, but the calibrating supernovae thin out beyond this."""
SLOW_MARGIN = 0.05
"""The calibration holds this far below its stated range: slow decliners crowd there."""
LEAST_DAYS = 1.5
"""Observed days: everything within is one epoch."""
LARGEST_GAP_D, GAP_UNTIL_D = 20.0, 25.0
"""Rest-frame days without a point that matter, and until when."""


def prior_sentences(model: TypeIaModel, assumptions: Assumptions) -> tuple[str, ...]:
    """Each prior by name: what it says, or that it is switched off."""
    prior, off = model.prior, assumptions.without
    low, high = prior.dm15_range
    return (
        "dust: switched off, any host E(B−V) from 0 on is as probable"
        if "dust" in off
        else f"dust: host E(B−V) from 0 on, falling as exp(−E/{prior.e_host_scale})",
        f"dm15: switched off, flat from {low} to {high}"
        if "dm15" in off
        else f"dm15: about {prior.dm15_mode}, −{prior.dm15_sigma_low}/+{prior.dm15_sigma_high}, from {low} to {high}",
        "grey: switched off, no scatter of all bands together is allowed for"
        if "grey" in off
        else f"grey: {model.scatter.grey:.3f} mag of scatter common to all bands",
        "offsets: switched off, other observatories' zero points are free"
        if "offsets" in off
        else f"offsets: other observatories' zero points within {SOURCE_OFFSET} mag a band where they state no error",
    )


def input_cautions(curve: LightCurve, target: Target, model_bands: tuple[str, ...]) -> list[Caution]:
    """The warnings that need no fit."""
    found = []
    if target.spectroscopic_type is None:
        found.append(Caution("type_assumed", "no spectroscopic type is known; a normal type Ia is assumed."))
    elif not target.spectroscopic_type.strip().lower().removeprefix("sn").strip().startswith("ia"):
        found.append(
            Caution(
                "other_type",
                f"the spectrum says {target.spectroscopic_type}, and this is the fit of a type Ia: μ means nothing.",
                doubts_type=True,
            )
        )
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


def cautions(curve: LightCurve, target: Target, solved: Solved, mu_err: float) -> tuple[Caution, ...]:
    """All that the observer should know before trusting the estimate; ``mu_err`` is that of μ, mag."""
    data, model = solved.data, solved.data.model
    found = input_cautions(curve, target, model.bands)
    _, _, t_max, dm15 = (float(value) for value in solved.mean)
    phase = data.phase(solved.system.points.mjd, t_max)
    first, last = float(phase.min()), float(phase.max())
    bands = [band for band, _ in solved.system.points.bands]
    if first > LATE_START_D:
        found.append(Caution("late_start", f"the first point is {first:.0f} d after maximum: t_max is uncertain."))
    if last < 0:
        found.append(Caution("before_maximum", f"the last point is {-last:.0f} d before the fitted maximum."))
    found += _rhythm(solved, phase)
    if len(bands) == 1:
        found.append(_single_band(bands[0], solved))
    elif not {"B", "g", "V"} & set(bands):
        found.append(Caution("no_B_or_V", f"only {', '.join(bands)}: nothing blue holds the host's dust."))
    elif not {"B", "g"} & set(bands):
        found.append(Caution("no_B_or_g", f"only {', '.join(bands)}: host dust is weakly constrained."))
    low, high = model.validity.dm15
    if not low - SLOW_MARGIN <= dm15 <= high:
        found.append(Caution("dm15_outside", f"Δm15 = {dm15:.2f} is outside {low} to {high}."))
    found += doubts(target, solved, mu_err)
    if target.z is not None and not 0.0 <= target.z <= LARGEST_Z:
        found.append(Caution("z_outside", f"z = {target.z:.3f} is outside 0 to {LARGEST_Z}."))
    return tuple(found)


def _rhythm(solved: Solved, phase: Floats) -> list[Caution]:
    """Too few epochs, or too long between two of them."""
    mjd = solved.system.points.mjd
    if float(mjd.max() - mjd.min()) < LEAST_DAYS:
        return [Caution("single_epoch", "all points are of one epoch: t_max and Δm15 come from the colours alone.")]
    early = np.unique(phase[phase < GAP_UNTIL_D])
    gaps = np.diff(np.append(early, phase[phase >= GAP_UNTIL_D].min(initial=GAP_UNTIL_D)))
    if len(gaps) == 0 or gaps.max() <= LARGEST_GAP_D:
        return []
    k = int(np.argmax(gaps))
    return [Caution("gap", f"no point from {early[k]:+.0f} to {early[k] + gaps[k]:+.0f} d: Δm15 rests on few nights.")]


def _single_band(band: str, solved: Solved) -> Caution:
    """One band says nothing of dust: the sentence says what stands in for it."""
    e, e_err = float(solved.mean[1]), float(solved.err[1])
    scale = solved.data.model.prior.e_host_scale
    assumed = (
        f"host E(B−V) = {e:.2f} ± {e_err:.2f} is the dust that type Ia supernovae usually have"
        if math.isfinite(scale)
        else f"host E(B−V) = {e:.2f} ± {e_err:.2f} is a guess"
    )
    return Caution("single_band", f"only {band} is there: {assumed}, not measured.")
