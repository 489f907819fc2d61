"""Joint zero points of all frames of one camera and band, anchored to the comparison stars' catalogue.

Model, for frame f and star s (Honeycutt 1992, PASP 104, 435, anchored instead of "sum of offsets = 0")::

    m_cat - m_inst + k″ X c = zp_f + T c_s - δ_s + noise,      δ_s ~ N(0, catalogue error²)

δ_s, the star's own offset, is an error of the catalogue. Because it is solved with all frames, a frame that
lost a star does not step; because it is held to zero within the catalogue's error, the solution stays on the
catalogue. The zero points are eliminated by hand (their block is diagonal): a solution is one small system.

Weights are ``1/(σ_photon² + σ_star² + σ_frame²)``: the extra scatter of a star (flat field, variability) and
of a frame (patchy cloud) are found from residuals that are significantly larger than photons allow.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats
from reduce.standard.outliers import (
    frame_scatter,
    median_absolute,
    outlying,
    star_scatter,
    stars_to_set_aside,
    wild,
)

LEAST_CATALOGUE_ERR = 1e-4
"""mag; an error of 0 in a catalogue means that nobody stated one."""
MAX_ROUNDS = 15


@dataclass(frozen=True, slots=True)
class JointSolution:
    """Everything the frames × stars of one camera and band say; F frames, S stars."""

    zp_mag: Floats
    """(F,) zero point at colour 0; NaN without a usable star."""
    zp_err_mag: Floats
    """(F,) the frame's own: photons of its stars, scaled by sqrt(chi²/dof) > 1, and its choice of stars."""
    sequence_err_mag: float
    """What all frames share: the error of the catalogue, at ``pivot_colour``."""
    term: float
    term_err: float
    term_fitted: bool
    pivot_colour: float
    """Colour at which the errors of zero point and term are independent; NaN without known colours."""
    residual: Floats
    """(F, S) measured - catalogue after zero point and term, *with* the star's own offset left in."""
    used: NDArray[np.bool_]
    """(F, S) measurements that took part."""
    star_offset_mag: Floats
    """(S,) mean residual (measured - catalogue)."""
    star_scatter_mag: Floats
    """(S,) σ_star."""
    set_aside: dict[int, str]
    """Star index → why the solution set it aside."""
    n_stars: NDArray[np.int64]
    """(F,)."""
    chi2_dof: Floats
    """(F,) without σ_frame; NaN with one star."""
    rms_mag: Floats
    """(F,) robust star-to-star scatter, outliers included, mean offsets removed; NaN below 3 stars."""
    slope: Floats
    """(F,) residual colour slope, never applied; NaN below 5 stars."""
    frame_scatter_mag: Floats
    """(F,) σ_frame: what any star of the frame, the target too, scatters beyond photons and σ_star."""


@dataclass(frozen=True, slots=True)
class Linear:
    """Answer of `least_squares`."""

    zp: Floats
    delta: Floats
    term: float
    slopes: Floats
    """(K,) of the further patterns."""
    covariance: Floats
    """(S+1+K, S+1+K) of δ, T and the slopes."""
    gradient: Floats
    """(F, S+1) of zero point + T·0 with respect to δ, and -mean colour with respect to T."""
    weight_sum: Floats


def _mean(weight: Floats, value: Floats, total: Floats) -> Floats:
    """(F,) weighted mean over the stars; 0 where nothing has weight."""
    mean: Floats = np.einsum("fs,fs->f", weight, value) / np.where(total > 0, total, 1.0)
    return mean


def least_squares(
    y: Floats,
    weight: Floats,
    colour: Floats,
    prior: Floats,
    informs: NDArray[np.bool_],
    term: float | None,
    patterns: Sequence[Floats] = (),
) -> Linear:
    """Least squares for zp, δ and T (held when ``term`` is given); einsum keeps the order of the sums.

    ``patterns`` are K further (F, S) arrays; the slope of each is solved for too.
    """
    n_stars = len(colour)
    colours = np.broadcast_to(colour, y.shape)
    total = weight.sum(axis=1)
    share = weight / np.where(total > 0, total, 1.0)[:, None]
    y_mean, c_mean = _mean(weight, y, total), _mean(weight, colours, total)
    w, s = weight[informs], share[informs]
    dy, dc = (y - y_mean[:, None])[informs], (colours - c_mean[:, None])[informs]
    at, size = n_stars, n_stars + 1 + len(patterns)
    matrix, right = np.zeros((size, size)), np.zeros(size)
    matrix[:at, :at] = -np.einsum("fs,ft->st", w, s) + np.diag(w.sum(axis=0) + prior)
    if term is not None:
        dy = dy - term * dc
    right[:at] = -np.einsum("fs,fs->s", w, dy)
    means = [_mean(weight, pattern, total) for pattern in patterns]
    columns = [dc, *((pattern - mean[:, None])[informs] for pattern, mean in zip(patterns, means, strict=True))]
    for j, one in enumerate(columns, start=at):
        matrix[:at, j] = matrix[j, :at] = -np.einsum("fs,fs->s", w, one)
        right[j] = np.einsum("fs,fs,fs->", w, one, dy)
        for k, other in enumerate(columns[: j - at + 1], start=at):
            matrix[j, k] = matrix[k, j] = np.einsum("fs,fs,fs->", w, one, other)
    if term is not None:
        matrix[at, :] = matrix[:, at] = 0.0
        matrix[at, at], right[at] = 1.0, term
    covariance = np.linalg.inv(matrix)
    unknown = np.einsum("ij,j->i", covariance, right)
    if term is not None:
        covariance[at, at] = 0.0
    delta, slope, slopes = unknown[:at], float(unknown[at]), unknown[at + 1 :]
    level = y_mean - slope * c_mean + np.einsum("fs,s->f", share, delta)
    for mean, pattern_slope in zip(means, slopes, strict=True):
        level = level - pattern_slope * mean
    zp: Floats = np.where(total > 0, level, np.nan)
    gradient: Floats = np.column_stack([share, -c_mean])
    return Linear(zp, delta, slope, slopes, covariance.astype(np.float64), gradient, total)


def solve_zero_points(
    offset: Floats,
    err: Floats,
    catalogue_err: Floats,
    colour: Floats,
    informs: NDArray[np.bool_],
    term: float | None = None,
    term_err: float = 0.0,
    set_aside: Mapping[int, str] = MappingProxyType({}),
) -> JointSolution:
    """Solve all zero points of one camera and band together.

    Parameters
    ----------
    offset
        (F, S) ``m_cat - m_inst + k″ X colour``; NaN where a star is not measured on a frame.
    err
        (F, S) error of the instrumental magnitude.
    catalogue_err, colour
        (S,) of the comparison stars; colours must be finite (0 for all when none is known).
    informs
        (F,) frames that may say something about stars and colour term; the others only get their zero point.
    term, term_err
        Colour term to adopt; None: fit it.
    set_aside
        Index of a star → why it must not take part.
    """
    prior = np.maximum(catalogue_err, LEAST_CATALOGUE_ERR) ** -2
    measured = np.isfinite(offset) & (err > 0)
    y, variance = np.where(measured, offset, 0.0), np.where(measured, err, 1.0) ** 2
    if not (measured.any(axis=1) & informs).any():
        informs = np.ones(len(y), bool)
    star_sigma, frame_sigma = np.zeros(y.shape[1]), np.zeros(len(y))
    aside = dict(set_aside)
    keep = measured & _not_aside(aside, y.shape) & ~wild(np.where(measured, offset, np.nan))
    for _ in range(MAX_ROUNDS):
        photon_star = variance + star_sigma**2
        full = photon_star + frame_sigma[:, None] ** 2
        fit = least_squares(y, np.where(keep, 1.0 / full, 0.0), colour, prior, informs, term)
        plain = y - np.nan_to_num(fit.zp)[:, None] - fit.term * colour
        residual = plain + fit.delta
        found = stars_to_set_aside(
            plain,
            residual,
            np.where(keep & informs[:, None], 1 / full, 0.0),
            variance,
            prior,
            colour,
            fit.term,
            None if term is None else term_err,
        )
        new = {star: why for star, why in found.items() if star not in aside}
        aside |= new
        standing = measured & _not_aside(aside, y.shape)
        frame_sigma = frame_scatter(residual, photon_star, standing)
        full = photon_star + frame_sigma[:, None] ** 2
        new_keep = standing & ~outlying(residual, full, standing)
        new_sigma = star_scatter(residual, variance + frame_sigma[:, None] ** 2, new_keep & informs[:, None])
        settled = (
            not new and np.array_equal(new_keep, keep) and np.allclose(new_sigma, star_sigma, rtol=0.02, atol=2e-4)
        )
        keep, star_sigma = new_keep, new_sigma
        if settled:
            break
    photon_star = variance + star_sigma**2
    full = photon_star + frame_sigma[:, None] ** 2
    fit = least_squares(y, np.where(keep, 1.0 / full, 0.0), colour, prior, informs, term)
    return _conclude(
        fit, y, measured, keep, photon_star, full, prior, colour, informs, (star_sigma, frame_sigma), aside,
        term, term_err,
    )  # fmt: skip


def _conclude(
    fit: Linear,
    y: Floats,
    measured: NDArray[np.bool_],
    keep: NDArray[np.bool_],
    photon_star: Floats,
    full: Floats,
    prior: Floats,
    colour: Floats,
    informs: NDArray[np.bool_],
    scatter: tuple[Floats, Floats],
    aside: dict[int, str],
    term: float | None,
    term_err: float,
) -> JointSolution:
    n = keep.sum(axis=1)
    dof = np.maximum(n - 1, 1)
    plain = y - np.nan_to_num(fit.zp)[:, None] - fit.term * colour
    residual = plain + fit.delta
    frames_of_star = np.maximum(keep.sum(axis=0), 1)
    # The pull of the catalogue is spread over the star's frames: one frame alone has the textbook chi².
    held = np.where(keep, fit.delta**2 * prior / frames_of_star, 0.0).sum(axis=1)
    chi2 = np.where(keep, residual**2 / photon_star, 0.0).sum(axis=1) + held
    chi2_full = np.where(keep, residual**2 / full, 0.0).sum(axis=1) + held
    own_scale = np.sqrt(np.maximum(1.0, np.where(n > 1, chi2_full / dof, 1.0)))

    anchor = informs & (n > 0)
    mean_gradient = fit.gradient[anchor].mean(axis=0) if anchor.any() else np.zeros(len(colour) + 1)
    across = np.einsum("s,st->t", mean_gradient, fit.covariance)
    if term is None:
        term_err = float(np.sqrt(fit.covariance[-1, -1]))
        pivot = float(-across[-1] / fit.covariance[-1, -1])
    else:
        pivot = float(-mean_gradient[-1])
    shared = mean_gradient.copy()
    shared[-1] += pivot
    apart = fit.gradient - mean_gradient
    own = np.einsum("fs,st,ft->f", apart, fit.covariance, apart)
    if term is not None:
        own = own + (apart[:, -1] * term_err) ** 2
    sequence_variance = float(np.einsum("s,st,t->", shared, fit.covariance, shared))

    weight = np.where(keep & informs[:, None], 1 / full, 0.0)
    star_total = weight.sum(axis=0)
    catalogue_offset = np.where(
        star_total > 0,
        -np.einsum("fs,fs->s", weight, plain) / np.where(star_total > 0, star_total, 1),
        np.nan,
    )
    return JointSolution(
        zp_mag=fit.zp,
        zp_err_mag=np.where(
            n > 0, np.sqrt(own_scale**2 / np.where(n > 0, fit.weight_sum, 1.0) + np.maximum(own, 0)), np.nan
        ),
        sequence_err_mag=float(
            np.sqrt(max(sequence_variance, 0.0)) * _catalogue_scale(catalogue_offset, star_total, prior, term)
        ),
        term=fit.term,
        term_err=term_err,
        term_fitted=term is None,
        pivot_colour=pivot,
        residual=np.where(measured & np.isfinite(fit.zp)[:, None], -plain, np.nan),
        used=keep,
        star_offset_mag=_aside_offset(catalogue_offset, plain, measured, full, informs),
        star_scatter_mag=scatter[0],
        set_aside=aside,
        n_stars=n,
        chi2_dof=np.where(n > 1, chi2 / dof, np.nan),
        rms_mag=np.where(
            measured.sum(axis=1) >= 3,
            median_absolute(np.where(measured & _not_aside(aside, y.shape), residual, np.nan)),
            np.nan,
        ),
        slope=_slopes(plain + fit.delta, np.where(keep, 1 / photon_star, 0.0), colour, n),
        frame_scatter_mag=scatter[1],
    )


def _not_aside(aside: dict[int, str], shape: tuple[int, ...]) -> NDArray[np.bool_]:
    allowed = np.ones(shape, bool)
    allowed[:, list(aside)] = False
    return allowed


def _catalogue_scale(offset: Floats, total: Floats, prior: Floats, term: float | None) -> float:
    """How much worse the catalogue's errors are than stated: ``max(1, sqrt(chi²/dof))`` over the stars."""
    used = total > 0
    dof = int(used.sum()) - (2 if term is None else 1)
    if dof < 5:
        return 1.0
    chi2 = float(np.sum(offset[used] ** 2 / (1 / prior[used] + 1 / total[used])))
    return max(1.0, float(np.sqrt(chi2 / dof)))


def _aside_offset(
    offset: Floats, plain: Floats, measured: NDArray[np.bool_], full: Floats, informs: NDArray[np.bool_]
) -> Floats:
    """Offsets completed by those of stars that did not take part."""
    weight = np.where(measured & informs[:, None], 1 / full, 0.0)
    total = weight.sum(axis=0)
    rest = -np.einsum("fs,fs->s", weight, plain) / np.where(total > 0, total, 1.0)
    return np.where(np.isfinite(offset), offset, np.where(total > 0, rest, np.nan))


def _slopes(residual: Floats, weight: Floats, colour: Floats, n: NDArray[np.int64]) -> Floats:
    """(F,) weighted slope of the residuals in colour."""
    colours = np.broadcast_to(colour, residual.shape)
    total = weight.sum(axis=1)
    distance = colours - _mean(weight, colours, total)[:, None]
    spread = np.einsum("fs,fs->f", weight, distance**2)
    slope = np.einsum("fs,fs,fs->f", weight, distance, residual) / np.where(spread > 0, spread, 1.0)
    return np.where((n >= 5) & (spread > 0), slope, np.nan)
