"""The sky about many stars: a clipped plane through an annulus, evaluated at the star.

A plane instead of a single level, because masked neighbours and image edges make an annulus lopsided: on a gradient
(moonlight, a galaxy's disc) a level would then be that of another place. A clipped mean instead of a median, because
photon noise is skewed: the median of a Poisson sky lies about 1/6 electron low, which is several millimagnitudes of
a faint star.

On its host galaxy a supernova's sky is bent, which a plane far outside misses by up to 60 % of the galaxy's light at
the star; where the observer says so, a surface of second degree through a nearer annulus is taken.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats, Image

INNER_FWHM = 4.0
OUTER_FWHM = 7.0
LEAST_PX = 300
"""The annulus grows until it holds so many pixels."""
ENOUGH_PX = 60
"""With fewer pixels left, those under neighbours are taken back and left to the clipping."""
FEWEST_PX = 12
NEIGHBOUR_FWHM = 3.0
"""Radius about every other star that is kept out of the sky."""
CLIP_SIGMA = 3.5
"""At 3 σ clipping a skewed Poisson sky costs 0.04 electrons a pixel, at 3.5 σ 0.01."""
ROUNDS = 5
HOST_INNER_FWHM, HOST_OUTER_FWHM = 3.0, 5.0
"""On a galaxy, where the sky is bent: nearer, and a surface of second degree instead of a plane."""
OUTSKIRTS_OUTER_FWHM = 7.0
"""In a galaxy's outskirts, which bend little, a wider one is as true and less noisy."""
HOST_MISS = 0.15
"""Fraction of a galaxy's light at the star that this sky still misses, rms (measured on simulated inclined discs)."""

ANNULUS_FWHM = {
    "none": (INNER_FWHM, OUTER_FWHM),
    "outskirts": (HOST_INNER_FWHM, OUTSKIRTS_OUTER_FWHM),
    "inside": (HOST_INNER_FWHM, HOST_OUTER_FWHM),
}


@dataclass(frozen=True, slots=True)
class SkyLevels:
    """Sky at each star, arrays of shape (n,); NaN where too few pixels were left."""

    level_e_px: Floats
    sigma_e_px: Floats
    """Scatter of one pixel about the plane."""
    err_e_px: Floats
    n_px: Floats


def without_neighbours(usable: NDArray[np.bool_], neighbours_xy: Floats, fwhm_px: float) -> NDArray[np.bool_]:
    """``usable`` (ny, nx) without the discs of all stars of the image.

    The star itself may be among them: its own disc does not reach its annulus.
    """
    ny, nx = usable.shape
    rows, columns = _ring(0.0, NEIGHBOUR_FWHM * fwhm_px)
    y = np.rint(neighbours_xy[:, 1]).astype(int)[:, None] + rows
    x = np.rint(neighbours_xy[:, 0]).astype(int)[:, None] + columns
    inside = (y >= 0) & (y < ny) & (x >= 0) & (x < nx)
    clear = usable.copy()
    clear[y[inside], x[inside]] = False
    return clear


def annulus_sky(
    data_e: Image,
    usable: NDArray[np.bool_],
    neighbours_xy: Floats,
    x_px: Floats,
    y_px: Floats,
    fwhm_px: float,
    *,
    host: Literal["none", "outskirts", "inside"] = "none",
) -> SkyLevels:
    """Sky level, scatter and error at many stars.

    Parameters
    ----------
    data_e, usable
        (ny, nx) electrons, and which pixels may be used.
    neighbours_xy
        (m, 2) positions of all stars of the image.
    x_px, y_px
        (n,) positions to measure.
    host
        Where on a galaxy they lie, whose light bends under the annulus: noisier, but nearer to the light at the star.
    """
    rows, columns = _annulus(fwhm_px, *ANNULUS_FWHM[host])
    ny, nx = data_e.shape
    y = np.rint(y_px).astype(int)[:, None] + rows
    x = np.rint(x_px).astype(int)[:, None] + columns
    inside = (y >= 0) & (y < ny) & (x >= 0) & (x < nx)
    pixel = np.where(inside, y * nx + x, 0)
    good = inside & usable.ravel()[pixel]
    clear = inside & without_neighbours(usable, neighbours_xy, fwhm_px).ravel()[pixel]
    good = np.where(clear.sum(axis=1, keepdims=True) >= ENOUGH_PX, clear, good)
    values = np.where(good, data_e.ravel()[pixel], 0.0).astype(float)
    degree = 1 if host == "none" else 2
    at_star = _terms(x_px - np.rint(x_px), y_px - np.rint(y_px), degree).T
    return _surfaces(values, good, _terms(columns.astype(float), rows.astype(float), degree), at_star)


def _terms(x: Floats, y: Floats, degree: int) -> Floats:
    """(k, n) terms of a surface: 1, x, y and for the second degree x², xy, y²."""
    terms = [np.ones_like(x), x, y]
    return np.stack(terms if degree == 1 else [*terms, x**2, x * y, y**2])


def _ring(inner_px: float, outer_px: float) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Row and column offsets of the pixels with inner ≤ radius ≤ outer."""
    grid = np.arange(-int(outer_px), int(outer_px) + 1)
    square = grid[:, None] ** 2 + grid[None, :] ** 2
    rows, columns = np.nonzero((square >= inner_px**2) & (square <= outer_px**2))
    return grid[rows], grid[columns]


def _annulus(fwhm_px: float, inner_fwhm: float, outer_fwhm: float) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    inner, outer = inner_fwhm * fwhm_px, outer_fwhm * fwhm_px
    return _ring(inner, max(outer, (LEAST_PX / np.pi + inner**2) ** 0.5 + 1.0))


def _surfaces(values: Floats, good: NDArray[np.bool_], basis: Floats, at_star: Floats) -> SkyLevels:
    """Fit (n, m) values with the (k, m) terms of ``basis``, clipped, and evaluate at the stars, (n, k) terms."""
    # The first centre and width come from the lower half alone, which stars in the annulus do not reach.
    middle, low = _quantiles(values, good, (0.5, 0.1587))
    sigma = np.maximum(middle - low, 1e-12)
    keep = good & (np.abs(values - middle[:, None]) < CLIP_SIGMA * sigma[:, None])
    level = err = np.full(len(values), np.nan)
    n = keep.sum(axis=1)
    for _ in range(ROUNDS):
        surface, inverse = _fit(values - middle[:, None], keep, basis)
        residual = values - middle[:, None] - np.einsum("nk,km->nm", surface, basis)
        n = keep.sum(axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            sigma = np.sqrt(np.einsum("nm,nm,nm->n", keep.astype(float), residual, residual) / (n - float(len(basis))))
        level = middle + np.einsum("nk,nk->n", surface, at_star)
        err = sigma * np.sqrt(np.maximum(np.einsum("nj,njk,nk->n", at_star, inverse, at_star), 0.0))
        clipped = good & (np.abs(residual) <= CLIP_SIGMA * sigma[:, None])
        if np.array_equal(clipped, keep):
            break
        keep = clipped
    known = n >= FEWEST_PX
    level, sigma, err = (np.where(known, column, np.nan) for column in (level, sigma, err))
    return SkyLevels(level, sigma, err, n.astype(float))


def _quantiles(values: Floats, good: NDArray[np.bool_], which: tuple[float, ...]) -> list[Floats]:
    """Quantiles of the good values of each row; 0 for a row without any."""
    ordered = np.sort(np.where(good, values, np.inf).astype(np.float32), axis=1)
    last = np.maximum(good.sum(axis=1) - 1, 0)
    found = [ordered[np.arange(len(values)), np.rint(q * last).astype(int)].astype(float) for q in which]
    return [np.where(np.isfinite(column), column, 0.0) for column in found]


def _fit(values: Floats, keep: NDArray[np.bool_], basis: Floats) -> tuple[Floats, Floats]:
    """Surfaces (n, k) through the kept values, and the inverses (n, k, k) of their normal matrices."""
    k = len(basis)
    weight = keep.astype(float)
    # einsum, not a matrix product: the sum's order must not depend on the linear algebra library's threads.
    products = (basis[:, None, :] * basis[None, :, :]).reshape(k * k, -1)
    normal = np.einsum("nm,km->nk", weight, products).reshape(-1, k, k)
    right = np.einsum("nm,km->nk", weight * values, basis)
    # A tilt that too few pixels cannot tell is held at zero instead of failing.
    poor = keep.sum(axis=1) < FEWEST_PX
    normal[poor] = np.eye(k)
    right[poor] = 0.0
    inverse = np.linalg.inv(normal)
    return np.einsum("njk,nk->nj", inverse, right), inverse
