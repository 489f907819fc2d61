"""The invented stars, and the catalogue that people would have of some of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from demo_frames.scenario import Scenario
from reduce.records import Floats

BANDS = ("B", "V", "R", "I")


@dataclass(frozen=True, slots=True)
class StarField:
    """True stars, arrays of shape (n,); the first ``n_comparison`` are in the catalogue."""

    ra_deg: Floats
    dec_deg: Floats
    mag: dict[str, Floats]
    n_comparison: int
    catalogue_mag: dict[str, Floats]
    """(n_comparison,) true magnitude with a Gaussian error of ``catalogue_err``."""
    catalogue_err: dict[str, Floats]

    @property
    def ids(self) -> tuple[str, ...]:
        """Names of the comparison stars."""
        return tuple(f"L{number:02d}" for number in range(1, self.n_comparison + 1))


def _positions(scenario: Scenario, rng: np.random.Generator) -> tuple[Floats, Floats]:
    """East and north of the supernova, arcsec; comparison stars first, nothing too close to anything."""
    scene, galaxy = scenario.stars, scenario.galaxy
    # Clear of the supernova and of its host.
    taken = [(0.0, 0.0), (galaxy.east_arcsec, galaxy.north_arcsec)]
    apart = [1.5 * scene.separation_arcsec, 2.0 * scene.separation_arcsec]
    while len(taken) < scene.field + 2:
        half = scene.square_arcsec / 2.0
        east, north = rng.uniform(-half, half, 2)
        inner = len(taken) < scene.comparison + 2
        if inner and np.hypot(east, north) > scene.comparison_radius_arcsec:
            continue
        distance = np.hypot(*(np.array(taken) - (east, north)).T)
        if np.any(distance < apart):
            continue
        taken.append((float(east), float(north)))
        apart.append(scene.separation_arcsec)
    east, north = np.array(taken[2:]).T
    return east, north


def _magnitudes(rng: np.random.Generator, v: Floats, bv_range: tuple[float, float]) -> dict[str, Floats]:
    """V and B-V as given and drawn; V-R and R-I follow B-V as in ordinary stars, with a little of their own."""
    n = len(v)
    bv = rng.uniform(*bv_range, n)
    vr = 0.56 * bv + 0.02 + rng.normal(0.0, 0.015, n)
    ri = 0.48 * bv + 0.05 + rng.normal(0.0, 0.015, n)
    return {"B": v + bv, "V": v, "R": v - vr, "I": v - vr - ri}


def draw_star_field(scenario: Scenario, seed: int) -> StarField:
    """Stars about the supernova, fainter ones more numerous."""
    rng = np.random.default_rng([seed, 2])
    scene = scenario.stars
    east, north = _positions(scenario, rng)
    n, m = scene.field, scene.comparison
    dec = scenario.supernova.dec_deg + north / 3600.0
    ra = scenario.supernova.ra_deg + east / 3600.0 / np.cos(np.radians(dec))
    low, high = np.full(n, scene.v_range[0]), np.full(n, scene.v_range[1])
    low[:m], high[:m] = scene.comparison_v_range
    # Star counts grow as 10**(0.3 V): the inverse of their cumulative distribution.
    share = rng.uniform(size=n)
    v = np.log10(10.0 ** (0.3 * low) + share * (10.0 ** (0.3 * high) - 10.0 ** (0.3 * low))) / 0.3
    mag = _magnitudes(rng, v, scene.bv_range)
    err = {band: np.round(rng.uniform(*scene.catalogue_error, m), 3) for band in BANDS}
    catalogue = {band: np.round(mag[band][:m] + rng.normal(0.0, err[band]), 4) for band in BANDS}
    return StarField(ra, dec, mag, m, catalogue, err)
