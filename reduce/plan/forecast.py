"""What points that are not taken yet would do to the error of a type Ia modulus.

Given the points at hand, parameters θ = (μ, host E, t_max, Δm15) have the covariance S of the fit's posterior. Points
to come, y, are linear in θ about a draw of it, with the supernova's own scatter and the errors that bands and nights
share correlated with those of the points at hand. Conditioned on these,

    y = J̃ θ + r,   J̃ = J_c − C_ce C_ee⁻¹ J_e,   cov(r) = C_cc − C_ce C_ee⁻¹ C_ec,

so that cov(θ, y) = S J̃ᵀ and cov(y) = J̃ S J̃ᵀ + cov(r); each measured point then takes its share by a rank-one update. It
is averaged over draws of (t_max, Δm15), because early on the light curve's slopes at the epochs to come are not known.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from reduce.candles.covariance import covariance
from reduce.candles.distance import rest_phase
from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel, type_ia_model
from reduce.candles.points import Points, select
from reduce.candles.posterior import Data
from reduce.candles.reddening import to_sf11
from reduce.candles.search import LEAST_POINTS
from reduce.candles.solve import Solved, solve
from reduce.records import Floats, LightCurve, Target

N_DRAWS = 5
T_STEP_D, DM15_STEP = 0.5, 0.02


@dataclass(frozen=True, slots=True)
class Slot:
    """One band of one night, at the hour that is best for it."""

    night: str
    mjd: float
    band: str


@dataclass(slots=True)
class Outlook:
    """Joint covariance of the parameters and the points of all slots, for each draw; it shrinks as points are taken."""

    theta: Floats
    """(draw, 4, 4) covariance of (μ, host E, t_max, Δm15)."""
    cross: Floats
    """(draw, 4, slot)."""
    points: Floats
    """(draw, slot, slot) in mag², without the photon noise of the exposures."""

    @property
    def mu_variance(self) -> float:
        """Expected variance of μ, mag²."""
        return float(self.theta[:, 0, 0].mean())

    def gain(self, slot: int, variance: float) -> float:
        """Fall of `mu_variance` by one exposure in a slot with photon noise ``variance``, mag²."""
        return float((self.cross[:, 0, slot] ** 2 / (self.points[:, slot, slot] + variance)).mean())

    def take(self, slot: int, variance: float) -> None:
        """One exposure in a slot with photon noise ``variance``, mag²."""
        column = self.points[:, :, slot].copy()
        cross = self.cross[:, :, slot].copy()
        total = column[:, slot] + variance
        self.theta -= np.einsum("da,db->dab", cross, cross) / total[:, None, None]
        self.cross -= np.einsum("da,ds->das", cross, column) / total[:, None, None]
        self.points -= np.einsum("ds,dt->dst", column, column) / total[:, None, None]

    def copy(self) -> Outlook:
        """One to try things on."""
        return Outlook(self.theta.copy(), self.cross.copy(), self.points.copy())

    def only(self, slots: Sequence[int]) -> Outlook:
        """A copy with some of the slots."""
        rows = np.array(slots, dtype=int)
        points = self.points[:, rows[:, None], rows[None, :]]
        return Outlook(self.theta.copy(), self.cross[:, :, rows], points)


def solved_curve(curve: LightCurve, target: Target) -> Solved | None:
    """The posterior of a light curve; None when it cannot be fitted yet."""
    model = type_ia_model()
    ebv = 0.0 if target.ebv_mw is None else to_sf11(target.ebv_mw, target.ebv_scale)
    mags, fluxes = select(curve, model)
    if len(mags) < LEAST_POINTS:
        return None
    dust = np.array([model.mw_coefficients[band] for band in mags.band.tolist()])
    mags = replace(mags, value=mags.value - dust * ebv)
    return solve(Data(mags, fluxes, target.z or 0.0, ebv, model))


def expected_mag(solved: Solved, band: str, mjd: float) -> float:
    """Magnitude as observed that the fit expects in a band."""
    data, model = solved.data, solved.data.model
    mu, e, t_max, dm15 = (float(value) for value in solved.mean)
    phase = rest_phase(np.array([mjd]), t_max, data.z)
    shape = float(model.standard_mag(band, phase, np.array([dm15]), data.z)[0, 0])
    return shape + mu + model.host_coefficient(band, data.z) * e + model.mw_coefficients[band] * data.ebv_mw


def outlook(solved: Solved, slots: Sequence[Slot], err_night: dict[str, float]) -> Outlook:
    """The joint covariance of the parameters and what the slots would show.

    Parameters
    ----------
    err_night
        Band → error in mag that all frames of a night share.
    """
    data = solved.data
    mags = data.mags.take(solved.keep)
    both, is_slot, order = _with_slots(mags, slots, err_night, data.model)
    theta, cross, points = [], [], []
    for t_max, dm15 in _draws(solved):
        phase = data.phase(both.mjd, t_max)
        inside = (phase > FIRST_PHASE) & (phase < LAST_PHASE)
        design = _design(both, phase, dm15, data.z, data.model)
        total = covariance(both, phase, data.model).total
        old = ~is_slot & inside
        carried = np.linalg.solve(total[np.ix_(old, old)], total[np.ix_(old, is_slot)])
        slope = design[is_slot] - carried.T @ design[old]
        scatter = total[np.ix_(is_slot, is_slot)] - carried.T @ total[np.ix_(old, is_slot)]
        slope[~inside[is_slot]] = 0.0  # the model does not reach there: such a point tells nothing
        theta.append(solved.cov)
        cross.append((solved.cov @ slope.T)[:, order])
        points.append((slope @ solved.cov @ slope.T + scatter)[np.ix_(order, order)])
    return Outlook(np.array(theta), np.array(cross), np.array(points))


def _draws(solved: Solved) -> list[tuple[float, float]]:
    """(t_max, Δm15) of nodes at even steps of the posterior's cumulative weight."""
    nodes = solved.nodes
    cumulative = np.cumsum(nodes.weight.ravel())
    chosen = np.searchsorted(cumulative, (np.arange(N_DRAWS) + 0.5) / N_DRAWS * cumulative[-1])
    i, j = np.unravel_index(chosen, nodes.ln_p.shape)
    return [(float(nodes.t_max[a]), float(nodes.dm15[b])) for a, b in zip(i, j, strict=True)]


def _with_slots(
    mags: Points, slots: Sequence[Slot], err_night: dict[str, float], model: TypeIaModel
) -> tuple[Points, NDArray[np.bool_], NDArray[np.intp]]:
    """Old points and slots as one set; which are slots, and where each slot stands among these."""
    n = len(slots)
    own = mags.source == ""
    known = {band: float(np.median(mags.err_band[rows][own[rows]])) for band, rows in mags.bands if own[rows].any()}
    names = [f"plan {k}" for k in range(n)]
    joined = Points(
        bands=(),
        mjd=np.append(mags.mjd, [slot.mjd for slot in slots]),
        band=np.append(mags.band, [slot.band for slot in slots]),
        night=np.append(mags.night, names),
        value=np.append(mags.value, np.zeros(n)),
        err=np.append(mags.err, np.zeros(n)),
        err_night=np.append(mags.err_night, [err_night.get(slot.band, 0.0) for slot in slots]),
        err_band=np.append(mags.err_band, [known.get(slot.band, model.scatter.zero_point) for slot in slots]),
        source=np.append(mags.source, np.full(n, "")),
        by_colour_terms=np.append(mags.by_colour_terms, np.full(n, bool(mags.by_colour_terms[own].any()))),
    )
    both = joined.take(np.ones(len(joined), bool))
    place = {name: k for k, name in enumerate(names)}
    which = np.array([place.get(name, -1) for name in both.night.tolist()])
    return both, which >= 0, np.argsort(which[which >= 0])


def _design(points: Points, phase: Floats, dm15: float, z: float, model: TypeIaModel) -> Floats:
    """(n, 4) derivatives of the magnitudes by (μ, host E, t_max, Δm15)."""
    low, high = model.prior.dm15_range
    d = np.array([max(dm15 - DM15_STEP, low), min(dm15 + DM15_STEP, high)])
    middle = np.array([dm15])
    sooner = model.standard_mags(points.bands, phase - T_STEP_D, middle, z)[:, 0]
    later = model.standard_mags(points.bands, phase + T_STEP_D, middle, z)[:, 0]
    shape = model.standard_mags(points.bands, phase, d, z)
    dust = np.array([model.host_coefficient(band, z) for band in points.band.tolist()])
    by_t_max = (sooner - later) / (2.0 * T_STEP_D) / (1.0 + z)
    by_dm15 = (shape[:, 1] - shape[:, 0]) / (d[1] - d[0])
    return np.column_stack([np.ones(len(points)), dust, by_t_max, by_dm15])
