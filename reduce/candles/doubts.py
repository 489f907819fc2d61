"""Evidence that a light curve is not that of a normal type Ia supernova."""

from __future__ import annotations

import math

import numpy as np

from reduce.candles.distance import hubble_modulus, peculiar_velocity_modulus_error
from reduce.candles.solve import Solved
from reduce.records import Caution, Floats, Target

LARGEST_CHI2 = 2.0
LARGEST_REJECTED = 0.15
DM15_EDGES = (0.75, 1.74)
"""Beyond them the fit leans on the edge of the model: the shape is not among its own."""
TOO_BLUE_SIGMA = 3.0
NO_SECOND_MAXIMUM_MAG, NO_SECOND_MAXIMUM_SIGMA = 0.25, 3.0
SECOND_MAXIMUM_D = (18.0, 32.0)
"""Rest-frame days when I and i of a normal type Ia rise again or stand still."""
OFF_HUBBLE_SIGMA = 4.0
LEAST_HUBBLE_Z = 0.003
"""Below, a redshift says nothing of the distance."""
PECULIAR_KM_S = 300.0


def doubts(target: Target, solved: Solved, mu_err: float) -> list[Caution]:
    """Named doubts with their evidence.

    Parameters
    ----------
    mu_err
        Error of the modulus with the scatter of supernovae, mag.
    """
    found = []

    def add(name: str, evidence: str) -> None:
        found.append(Caution(name, evidence, doubts_type=True))

    mu, e, _, dm15 = (float(value) for value in solved.mean)
    n = len(solved.system)
    if solved.chi2 > LARGEST_CHI2 * n:
        add("bad_chi2", f"χ² is {solved.chi2 / n:.1f} per point: perhaps no normal type Ia.")
    if solved.n_rejected > LARGEST_REJECTED * len(solved.data.mags):
        add("many_rejected", f"{solved.n_rejected} of {len(solved.data.mags)} points do not fit.")
    low, high = DM15_EDGES
    if not low <= dm15 <= high:
        side = "slower" if dm15 < low else "faster"
        add("shape_at_edge", f"Δm15 = {dm15:.2f}: it fades {side} than any normal type Ia of the model.")
    if e > solved.data.model.validity.e_host_most:
        add("high_extinction", f"host E(B−V) = {e:.2f}: very dusty, or redder by nature than a type Ia.")
    blue = _bluer_than_dustless(solved)
    if blue is not None:
        add("too_blue", f"bluer than a normal type Ia without dust by E(B−V) = {blue[0]:.2f} ± {blue[1]:.2f}.")
    dip = _missing_second_maximum(solved)
    if dip is not None:
        band, mag = dip
        add("no_second_maximum", f"{band} is {mag:.2f} mag too faint where a normal type Ia has its second maximum.")
    if target.z is not None and target.z >= LEAST_HUBBLE_Z:
        expected = hubble_modulus(target.z)
        sigma = math.hypot(mu_err, peculiar_velocity_modulus_error(target.z, PECULIAR_KM_S))
        if abs(mu - expected) > OFF_HUBBLE_SIGMA * sigma:
            word = "fainter" if mu > expected else "brighter"
            add(
                "off_hubble_law",
                f"{abs(mu - expected):.1f} mag {word} than a normal type Ia at z = {target.z:.4f} "
                f"({OFF_HUBBLE_SIGMA:.0f} σ would be {OFF_HUBBLE_SIGMA * sigma:.1f} mag).",
            )
    return found


def _bluer_than_dustless(solved: Solved) -> tuple[float, float] | None:
    """How negative E(B-V) would have to be, without its prior; None when that is not sure."""
    system = solved.system
    i, j = solved.nodes.peak
    e = float(solved.nodes.e[i, j])
    b = system.design.T @ (system.whitener @ solved.residual)  # about (μ, E) of the peak
    normal = system.design.T @ system.design
    if len(system.points.bands) < 2:
        return None
    inverse = np.linalg.inv(normal)
    free, sigma = e + float((inverse @ b)[1]), math.sqrt(float(inverse[1, 1]))
    return (-free, sigma) if free < -TOO_BLUE_SIGMA * sigma else None


def _missing_second_maximum(solved: Solved) -> tuple[str, float] | None:
    """Band and mag by which I or i lies below the model between +18 and +32 d."""
    points = solved.system.points
    phase = solved.data.phase(points.mjd, float(solved.mean[2]))
    worst: tuple[str, float] | None = None
    for band in ("I", "i"):
        mine = (points.band == band) & (phase > SECOND_MAXIMUM_D[0]) & (phase < SECOND_MAXIMUM_D[1])
        if not mine.any():
            continue
        mean, sigma = _mean(solved.residual[mine], solved.system.parts.total[np.ix_(mine, mine)])
        if mean > NO_SECOND_MAXIMUM_MAG and mean > NO_SECOND_MAXIMUM_SIGMA * sigma:
            worst = (band, mean) if worst is None or mean > worst[1] else worst
    return worst


def _mean(values: Floats, cov: Floats) -> tuple[float, float]:
    weights = np.linalg.solve(cov, np.ones(len(values)))
    return float(weights @ values / weights.sum()), float(1.0 / math.sqrt(weights.sum()))
