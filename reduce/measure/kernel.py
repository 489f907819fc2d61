"""The convolution that makes one image as blurred as another (Alard & Lupton 1998, ApJ 503, 325).

The kernel is a sum of Gaussians times low polynomials, so its coefficients follow from linear least squares. Which
polynomials are taken is left to the Bayesian information criterion; the wide Gaussians always are, since seeing has
wings: without them the fit hardly changes, but one in a hundred of a galaxy's light is left over. One kernel serves the
whole field, and is best known where the target's own galaxy shows it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats
from reduce.stars.width import FWHM_PER_SIGMA

LEAST_SIGMA_PX = 0.6
"""Of the middle Gaussian: a narrower one falls between the pixels."""
WIDTHS = (1.0, 0.5, 2.0, 4.0)
"""Of the Gaussians, in units of the width that makes the one seeing into the other; the wide ones are for the wings,
without which an extended galaxy loses what no star shows near its core."""
DEGREES = (4, 2, 0, 0)
"""Most of the polynomial on each Gaussian."""
CHOICES = ((2, -1, 0, 0), (2, 0, 0, 0), (2, 2, 0, 0), (4, 2, 0, 0))
"""Degrees that are tried; -1 leaves the Gaussian out."""
REACH_SIGMA = 2.0
"""Where the kernel is cut, in units of its widest Gaussian."""
MOST_HALF_PX = 24
MOST_NOISE = 0.3
"""Of a combination of terms: with more of it, it says little on the kernel."""


@dataclass(frozen=True, slots=True)
class Basis:
    """Terms of a kernel on a grid of ``step`` points a pixel."""

    sigma_px: tuple[float, ...]
    half: int
    """Grid points from the kernel's middle to its border."""
    step: int
    terms: tuple[tuple[int, int, int], ...]
    """(which Gaussian, power along x, power along y)."""

    def profile(self, gaussian: int, power: int) -> Floats:
        """(2 half + 1,) one factor of a separable term."""
        u = np.arange(-self.half, self.half + 1) / self.step / self.sigma_px[gaussian]
        bell = np.exp(-0.5 * u**2)
        profile: Floats = u**power * bell / bell.sum()
        return profile

    def images(self) -> Floats:
        """(terms, size, size) the terms as images."""
        return np.array([np.outer(self.profile(g, j), self.profile(g, i)) for g, i, j in self.terms])

    def chosen(self, degrees: tuple[int, ...]) -> NDArray[np.int64]:
        """Terms up to the degree given for each Gaussian."""
        return np.array([k for k, (g, i, j) in enumerate(self.terms) if i + j <= degrees[g]])

    def convolve(self, images: Floats, shape: tuple[int, int]) -> Floats:
        """(terms, n, ny, nx) of (n, Y, X) padded images: the image at each pixel, seen through each term.

        ``Y = step·(ny - 1) + 1 + 2 half``; the same for X. Term k weighs the grid point ``g`` about the pixel ``p``
        with ``terms[k](p - g)``.
        """
        ny, nx = shape
        out = np.empty((len(self.terms), len(images), ny, nx))
        done: dict[tuple[int, int], Floats] = {}
        for k, (g, i, j) in enumerate(self.terms):
            if (g, i) not in done:
                done[g, i] = _along(images, self.profile(g, i), nx, self.step, axis=2)
            out[k] = _along(done[g, i], self.profile(g, j), ny, self.step, axis=1)
        return out


def _along(images: Floats, profile: Floats, n: int, step: int, axis: int) -> Floats:
    """Convolve along one axis and keep every ``step``-th value; sums in one fixed order, whatever the machine."""
    last = step * (n - 1) + 1
    total: Floats | None = None
    size = len(profile)
    for k in range(size):
        cut = [slice(None)] * 3
        cut[axis] = slice(k, k + last, step)
        part = images[tuple(cut)] * profile[size - 1 - k]
        total = part if total is None else np.add(total, part, out=total)
    assert total is not None
    return total


def make_basis(sharp_fwhm_px: float, blunt_fwhm_px: float, step: int, *, single: bool = False) -> Basis:
    """Terms that make a seeing of ``sharp_fwhm_px`` into one of ``blunt_fwhm_px``; widths in pixels of the output.

    ``single`` gives one Gaussian alone, for fields with too few stars to tell more.
    """
    middle = math.sqrt(max(blunt_fwhm_px**2 - sharp_fwhm_px**2, 0.0)) / FWHM_PER_SIGMA
    middle = max(middle, LEAST_SIGMA_PX)
    sigma = (middle,) if single else tuple(max(w * middle, 0.5 * LEAST_SIGMA_PX) for w in WIDTHS)
    degrees = (0,) if single else DEGREES
    reach = REACH_SIGMA * max(sigma)
    half = min(max(math.ceil(reach * step), 3 * step), MOST_HALF_PX * step)
    terms = tuple(
        (g, i, j) for g, degree in enumerate(degrees) for i in range(degree + 1) for j in range(degree + 1 - i)
    )
    return Basis(sigma, half, step, terms)


@dataclass(frozen=True, slots=True)
class Sums:
    """Weighted sums of a linear fit: all that its solution needs."""

    normal: Floats
    """(k, k)."""
    noise: Floats
    """(k, k) the part of it that the columns' own noise has made."""
    right: Floats
    """(k,)."""
    square: float
    """Σ value² / variance."""
    n: int


@dataclass(frozen=True, slots=True)
class KernelFit:
    """Coefficients of the columns that the criterion wanted."""

    columns: NDArray[np.int64]
    coefficient: Floats
    covariance: Floats
    chi2: float
    """Reduced."""


def fit(sums: Sums, column_sets: list[NDArray[np.int64]]) -> KernelFit:
    """The set of columns with the least χ² + k ln n, their noise allowed for.

    Sets in which some direction is mostly noise are passed over, but for the first.
    """
    best: tuple[float, KernelFit] | None = None
    for columns in column_sets:
        at = np.ix_(columns, columns)
        size = np.sqrt(np.maximum(np.diag(sums.normal)[columns], 1e-300))
        # Terms of neighbouring widths are nearly alike; what they share must not blow up.
        normal = sums.normal[at] / np.outer(size, size) + 1e-10 * np.eye(len(columns))
        noise = sums.noise[at] / np.outer(size, size)
        root = np.linalg.inv(np.linalg.cholesky(normal))
        share = float(np.linalg.eigvalsh(root @ noise @ root.T)[-1])
        if share > MOST_NOISE:
            if best is not None or columns is not column_sets[0]:
                continue
            noise = noise * (MOST_NOISE / share)
        inverse = np.linalg.inv(normal - noise)
        right = sums.right[columns] / size
        solved = inverse @ right
        chi2 = sums.square - 2.0 * float(solved @ right) + float(solved @ normal @ solved)
        score = chi2 + len(columns) * math.log(max(sums.n, 2))
        if best is None or score < best[0]:
            reduced = chi2 / max(sums.n - len(columns), 1)
            best = (score, KernelFit(columns, solved / size, inverse / np.outer(size, size), reduced))
    assert best is not None
    return best[1]
