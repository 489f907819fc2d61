"""Elliptical Moffat profiles over square pixels, and their common shape from many star images at once.

Shape: ``[1 + 4 (2^(1/beta) - 1) q]^-beta`` with ``q = a x² + 2 b x y + c y²`` (Moffat 1969, A&A 3, 455): its height is
1 and it falls to one half where q = 1/4. Over the field a, b and c may run as a polynomial of low degree.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats

ROUNDS = 12
TOLERANCE = (0.5, 0.3, 0.2, 0.1)
"""Pixels may be off by this fraction of the star's light there, round by round, before they are left out."""
CLIP_SIGMA = 5.0
SHAPE_ERR = 0.03
"""Of the local light: what a Moffat profile misses; keeps one bright star from ruling."""
INV_BETA, INV_BETA_ERR = 0.3, 0.15
"""What 1/beta is before any star is seen."""
INV_BETA_RANGE = (0.03, 0.6)
LARGEST_STEP = 0.4
"""Relative, of a shape in one round."""
STARS_OF_DEGREE = {1: 8, 2: 15}
"""A variation over the field of this degree needs so many stars."""
FIELD_RUNS = (0.0, 0.01, 0.03, 0.1)
"""Relative, of a, b and c: how much they may be expected to change from the middle of the stars to their border; 0.1 is
5 % in FWHM."""


def terms(x_px: Floats, y_px: Floats, degree: int, scale_px: float) -> Floats:
    """(n, k) terms of a polynomial over the field in units of ``scale_px``."""
    x, y = x_px / scale_px, y_px / scale_px
    columns = [np.ones_like(x)]
    if degree >= 1:
        columns += [x, y]
    if degree >= 2:
        columns += [x**2, x * y, y**2]
    return np.stack(columns, axis=-1)


def nodes(fwhm_px: float) -> tuple[tuple[float, float], ...]:
    """Offsets and weights of the Gauss-Legendre rule over one pixel: more where the star is narrower."""
    if fwhm_px >= 5.0:
        return ((0.0, 1.0),)
    if fwhm_px >= 2.7:
        half = 0.5 / 3.0**0.5
        return ((-half, 0.5), (half, 0.5))
    outer = 0.5 * 0.6**0.5
    return ((-outer, 5 / 18), (0.0, 8 / 18), (outer, 5 / 18))


def profile(dx: Floats, dy: Floats, quadratic: Floats, inv_beta: float, fwhm_px: float) -> Floats:
    """Mean height in each pixel.

    Parameters
    ----------
    dx, dy
        Offsets of pixel centres from the stars, (n, 1, s) and (n, s, 1), or one shape (n, p) for both.
    quadratic
        (n, 3) a, b, c in px^-2.
    """
    a, b, c = _columns(quadratic, dx.ndim)
    bend = 4.0 * (2.0**inv_beta - 1.0)
    height: Floats | float = 0.0
    for oy, wy in nodes(fwhm_px):
        y = dy + oy
        for ox, wx in nodes(fwhm_px):
            x = dx + ox
            height = height + wx * wy * (1.0 + bend * (a * x * x + c * y * y + 2.0 * b * (x * y))) ** (-1.0 / inv_beta)
    return np.asarray(height)


def total(quadratic: Floats, inv_beta: float, radius_px: float) -> Floats:
    """Light of the profile within a radius, (n,); of an elliptical one within the ellipse of the same area."""
    root = np.sqrt(quadratic[:, 0] * quadratic[:, 2] - quadratic[:, 1] ** 2)
    bend = 4.0 * (2.0**inv_beta - 1.0)
    power = 1.0 / inv_beta - 1.0
    return np.asarray(np.pi / (power * bend * root) * (1.0 - (1.0 + bend * root * radius_px**2) ** -power))


def _columns(quadratic: Floats, ndim: int) -> tuple[Floats, Floats, Floats]:
    shape = (len(quadratic),) + (1,) * (ndim - 1)
    return quadratic[:, 0].reshape(shape), quadratic[:, 1].reshape(shape), quadratic[:, 2].reshape(shape)


def _slopes(dx: Floats, dy: Floats, quadratic: Floats, inv_beta: float, fwhm_px: float) -> Floats:
    """(7, n, p): height and its slopes with the star's x and y, with a, b, c and with 1/beta."""
    a, b, c = _columns(quadratic, dx.ndim)
    bend = 4.0 * (2.0**inv_beta - 1.0)
    bend_slope = 4.0 * np.log(2.0) * 2.0**inv_beta
    found = np.zeros((7, *dx.shape))
    for oy, wy in nodes(fwhm_px):
        y = dy + oy
        for ox, wx in nodes(fwhm_px):
            x = dx + ox
            xx, xy, yy = x * x, x * y, y * y
            q = a * xx + 2.0 * b * xy + c * yy
            u = 1.0 + bend * q
            logarithm = np.log(u)
            height = wx * wy * np.exp(-logarithm / inv_beta)
            slope = -bend / inv_beta * height / u
            found[0] += height
            found[1] -= slope * 2.0 * (a * x + b * y)
            found[2] -= slope * 2.0 * (b * x + c * y)
            found[3] += slope * xx
            found[4] += slope * 2.0 * xy
            found[5] += slope * yy
            found[6] += height * (logarithm / inv_beta**2 - bend_slope * q / (inv_beta * u))
    return found


@dataclass(frozen=True, slots=True)
class MoffatField:
    """The common shape of a frame's stars and how it runs over the field."""

    fwhm_px: float
    """Of the frame; sets the rule that pixels are integrated by, not the shape."""
    inv_beta: float
    coefficients: Floats
    """(3, k): a, b, c in px^-2 as polynomials of `terms`."""
    degree: int
    scale_px: float
    centre_px: tuple[float, float]

    @property
    def usual(self) -> float:
        """Middle of a and c, px^-2."""
        return float((self.coefficients[0, 0] * self.coefficients[2, 0] - self.coefficients[1, 0] ** 2) ** 0.5)

    def quadratic(self, x_px: Floats, y_px: Floats) -> Floats:
        """(n, 3) a, b, c at places of the frame, held to shapes that exist."""
        at = terms(x_px - self.centre_px[0], y_px - self.centre_px[1], self.degree, self.scale_px)
        found = np.einsum("nk,jk->nj", at, self.coefficients)
        mean = self.coefficients[:, 0]
        possible = _exists(found, mean)
        return np.where(possible[:, None], found, mean)


def _exists(quadratic: Floats, mean: Floats) -> NDArray[np.bool_]:
    """Whether the shapes are ellipses between a quarter and four times the mean one's area squared."""
    usual = mean[0] * mean[2] - mean[1] ** 2
    det = quadratic[:, 0] * quadratic[:, 2] - quadratic[:, 1] ** 2
    return np.asarray((quadratic[:, 0] > 0) & (det > usual / 4.0) & (det < usual * 4.0))


@dataclass(frozen=True, slots=True)
class FittedStars:
    """What a fit says of each star, arrays of shape (n,)."""

    height: Floats
    x_shift_px: Floats
    y_shift_px: Floats
    """To be added to the given positions."""
    good: NDArray[np.bool_]


def fit_moffat(
    light: Floats,
    variance: Floats,
    usable: NDArray[np.bool_],
    dx: Floats,
    dy: Floats,
    x_px: Floats,
    y_px: Floats,
    fwhm_px: float,
) -> tuple[MoffatField, FittedStars] | None:
    """One shape for many stars, each with its own height and position.

    Gauss-Newton; heights and positions are eliminated star by star. Whether and how much the
    shape runs over the field is decided by the evidence for each of `FIELD_RUNS` (MacKay 1992, Neural Computation 4,
    415), and held by it: a flux under a profile that is 1 % too narrow is 1 % too low, so even a small run counts.

    Parameters
    ----------
    light, variance, usable
        (n, p) sky-subtracted electrons, their variance without the star's photons, and which pixels count.
    dx, dy
        (n, p) offsets of the pixels from the first positions.
    x_px, y_px
        (n,) those positions on the frame.

    Returns
    -------
    The shape and the stars, or None where nothing sensible was found.
    """
    n = len(light)
    centre = (float(np.median(x_px)), float(np.median(y_px)))
    scale = max(float(np.ptp(x_px)), float(np.ptp(y_px)), 1.0) / 2.0
    start = np.array([[fwhm_px**-2], [0.0], [fwhm_px**-2]])
    state = _State(MoffatField(fwhm_px, INV_BETA, start, 0, scale, centre), np.zeros(n), np.zeros(n), np.zeros(n))
    problem = _Problem(light, variance, usable, dx, dy, x_px, y_px)
    state.height = problem.first_heights(state)
    if not problem.run(state, ROUNDS):
        return None
    shown = int((usable.any(axis=1) & (state.height > 0)).sum())
    degree = max((degree for degree, least in STARS_OF_DEGREE.items() if shown >= least), default=0)
    run = problem.expected_run(state, degree) if degree else 0.0
    if run > 0:
        constant = state.copy()
        k = terms(x_px, y_px, degree, scale).shape[1]
        wider = np.zeros((3, k))
        wider[:, 0] = state.field.coefficients[:, 0]
        state.field = MoffatField(fwhm_px, state.field.inv_beta, wider, degree, scale, centre)
        if not problem.run(state, 4, first=len(TOLERANCE), field_run=run):
            state = constant
    good = state.height > 0
    return state.field, FittedStars(state.height, state.x, state.y, good)


@dataclass(slots=True)
class _State:
    field: MoffatField
    height: Floats
    x: Floats
    y: Floats

    def copy(self) -> _State:
        return _State(self.field, self.height.copy(), self.x.copy(), self.y.copy())


@dataclass(frozen=True, slots=True)
class _Problem:
    light: Floats
    variance: Floats
    usable: NDArray[np.bool_]
    dx: Floats
    dy: Floats
    x_px: Floats
    y_px: Floats

    def first_heights(self, state: _State) -> Floats:
        """Heights under the first shape, by weighted sums."""
        field = state.field
        shape = profile(self.dx, self.dy, field.quadratic(self.x_px, self.y_px), field.inv_beta, field.fwhm_px)
        weight = np.where(self.usable, shape / self.variance, 0.0)
        return np.asarray((weight * self.light).sum(1) / np.maximum((weight * shape).sum(1), 1e-300))

    def run(self, state: _State, rounds: int, first: int = 0, field_run: float = 1.0) -> bool:
        """Improve the state in place; False when it ran away."""
        for k in range(first, first + rounds):
            moved = self._step(state, TOLERANCE[min(k, len(TOLERANCE) - 1)], field_run)
            if not np.isfinite(moved):
                return False
            if moved < 1e-4 and k >= len(TOLERANCE):
                break
        return True

    def _normal(self, state: _State, tolerance: float) -> tuple[Floats, Floats]:
        """Each star's normal matrix (n, 7, 7) and right side (n, 7): height, x, y, a, b, c, 1/beta."""
        field = state.field
        slopes = _slopes(
            self.dx - state.x[:, None], self.dy - state.y[:, None],
            field.quadratic(self.x_px, self.y_px), field.inv_beta, field.fwhm_px,
        )  # fmt: skip
        height = np.maximum(state.height, 0.0)[:, None]
        model = height * slopes[0]
        residual = self.light - state.height[:, None] * slopes[0]
        noise = self.variance + model
        keep = self.usable & (residual**2 <= CLIP_SIGMA**2 * (noise + (tolerance * model) ** 2))
        weight = np.where(keep, 1.0 / (noise + (SHAPE_ERR * model) ** 2), 0.0)
        slopes[1:] *= height
        weighted = slopes * weight
        return np.einsum("inp,jnp->nij", weighted, slopes), np.einsum("inp,np->ni", weighted, residual)

    def _reduced(self, state: _State, tolerance: float) -> tuple[Floats, Floats, Floats, Floats]:
        """Matrices and right sides of the shape alone, and what gives heights and positions back."""
        normal, right = self._normal(state, tolerance)
        own = normal[:, :3, :3] + np.eye(3) * (1e-9 * normal[:, [0, 1, 2], [0, 1, 2]].max(1)[:, None, None] + 1e-300)
        inverse = np.linalg.inv(own)
        gain = np.einsum("nij,njk->nik", inverse, normal[:, :3, 3:])
        matrix = normal[:, 3:, 3:] - np.einsum("nji,njk->nik", normal[:, :3, 3:], gain)
        side = right[:, 3:] - np.einsum("nji,nj->ni", gain, right[:, :3])
        return matrix, side, np.einsum("nij,nj->ni", inverse, right[:, :3]), gain

    def _design(self, field: MoffatField, degree: int) -> Floats:
        """(n, 4, 3k + 1): how a, b, c and 1/beta of each star follow from the coefficients."""
        at = terms(self.x_px - field.centre_px[0], self.y_px - field.centre_px[1], degree, field.scale_px)
        n, k = at.shape
        design = np.zeros((n, 4, 3 * k + 1))
        for j in range(3):
            design[:, j, j * k : (j + 1) * k] = at
        design[:, 3, 3 * k] = 1.0
        return design

    def _step(self, state: _State, tolerance: float, field_run: float) -> float:
        field = state.field
        k = field.coefficients.shape[1]
        matrix, side, own, gain = self._reduced(state, tolerance)
        design = self._design(field, field.degree)
        normal = np.einsum("nia,nij,njb->ab", design, matrix, design)
        right = np.einsum("nia,ni->a", design, side)
        normal[-1, -1] += INV_BETA_ERR**-2
        right[-1] += (INV_BETA - field.inv_beta) * INV_BETA_ERR**-2
        usual = field.usual
        held = np.zeros((3, k))
        held[:, 1:] = (field_run * usual) ** -2
        normal[np.arange(3 * k), np.arange(3 * k)] += held.ravel()
        right[:-1] -= (held * field.coefficients).ravel()
        scale = np.sqrt(np.maximum(np.diag(normal), 1e-300))
        damped = normal / scale / scale[:, None] + 1e-8 * np.eye(len(normal))
        step = np.linalg.solve(damped, right / scale) / scale
        largest = max(float(np.abs(step[:-1]).max() / usual), float(abs(step[-1]) / 0.3))
        if not np.isfinite(largest):
            return float("nan")
        step *= min(1.0, LARGEST_STEP / max(largest, 1e-300))
        coefficients = field.coefficients + step[:-1].reshape(3, k)
        if not coefficients[0, 0] * coefficients[2, 0] > coefficients[1, 0] ** 2 or coefficients[0, 0] <= 0:
            return float("nan")
        inv_beta = float(np.clip(field.inv_beta + step[-1], *INV_BETA_RANGE))
        state.field = MoffatField(field.fwhm_px, inv_beta, coefficients, field.degree, field.scale_px, field.centre_px)
        own = own - np.einsum("nij,nj->ni", gain, np.einsum("nia,a->ni", design, step))
        moves = np.clip(own[:, 1:], -0.3 * field.fwhm_px, 0.3 * field.fwhm_px)
        state.height = state.height + own[:, 0]
        limit = 0.5 * field.fwhm_px
        state.x, state.y = np.clip(state.x + moves[:, 0], -limit, limit), np.clip(state.y + moves[:, 1], -limit, limit)
        return largest

    def expected_run(self, state: _State, degree: int) -> float:
        """Which of `FIELD_RUNS` the stars make most likely, from their shapes about the common one."""
        matrix, side, _, _ = self._reduced(state, TOLERANCE[-1])
        matrix, side = matrix[:, :3, :3], side[:, :3]
        design = self._design(state.field, degree)[:, :3, :-1]
        k = design.shape[2] // 3
        constant = np.arange(3) * k
        running = np.setdiff1d(np.arange(3 * k), constant)
        normal = np.einsum("nia,nij,njb->ab", design, matrix, design)
        right = np.einsum("nia,ni->a", design, side)
        # The common shape is free: what it takes up of the runs is no sign of them.
        taken = normal[np.ix_(running, constant)] @ np.linalg.pinv(normal[np.ix_(constant, constant)], hermitian=True)
        normal, right = (
            normal[np.ix_(running, running)] - taken @ normal[np.ix_(constant, running)],
            right[running] - taken @ right[constant],
        )
        # A star whose pixels were all left out says nothing, and its matrix has no inverse.
        whole = float(np.einsum("ni,nij,nj->", side, np.linalg.pinv(matrix, rcond=1e-9, hermitian=True), side))
        best = float(right @ np.linalg.pinv(normal, rcond=1e-9, hermitian=True) @ right)
        excess = max(1.0, (whole - best) / max(3 * len(self.light) - 3 * k, 1))
        score = []
        for run in FIELD_RUNS:
            held = normal / excess * (run * state.field.usual) ** 2 + np.eye(len(running))
            gained = float(right @ np.linalg.solve(held, right)) / excess * (run * state.field.usual) ** 2
            score.append(gained - float(np.linalg.slogdet(held)[1]))
        return FIELD_RUNS[int(np.argmax(score))]
