"""Which stars, frames and measurements are worse than their errors say; arrays of F frames and S stars."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats

OUTLIER_SIGMA = 4.0
WRONG_ENTRY_MAG, WRONG_ENTRY_SIGMA = 0.04, 3.5
"""A little below 0.05 mag and 4 σ: what is wrong by that much is measured as less every other time."""
LARGEST_TERM = 0.35
"""Colour terms of photometric filters are smaller (common practice); what only a larger one explains is wrong."""
TERM_STEP = 0.01
VARIABLE_MAG = 0.05
"""Extra scatter from which a comparison star is set aside as variable (common practice)."""
LEAST_FRAMES_FOR_SCATTER = 5
LEAST_FRAMES_FOR_MEDIAN = 3
WILD_MAG = 1.0
"""Comparison stars and colour terms explain less than this (common practice)."""


def wild(offset: Floats) -> NDArray[np.bool_]:
    """(F, S) measurements so far from the medians of frame and star that no start should see them."""
    about_frame = offset - _row_median(offset)[:, None]
    star = _row_median(about_frame.T) if len(offset) >= LEAST_FRAMES_FOR_MEDIAN else np.zeros(offset.shape[1])
    far: NDArray[np.bool_] = np.abs(np.nan_to_num(about_frame - star)) > WILD_MAG
    return far


def _start(z: Floats, z_err: Floats, colour: Floats, slopes: Floats) -> tuple[float, float]:
    """Level and slope that most stars agree on: the least Cauchy loss over medians about all the slopes."""
    rest = z - slopes[:, None] * colour
    levels = np.median(rest, axis=1)
    loss = np.log1p(((rest - levels[:, None]) / (2 * z_err)) ** 2).sum(axis=1)
    best = int(np.argmin(loss))
    return float(levels[best]), float(slopes[best])


def _star_line(z: Floats, z_err: Floats, colour: Floats, term: float | None) -> Floats:
    """Residuals of the stars' mean offsets from a robust level (Cauchy weights).

    ``term``: the fitted colour term that was taken off, which wrong stars may have bent; None: it is not doubted.
    """
    tilted = term is not None
    terms = np.arange(-LARGEST_TERM, LARGEST_TERM + TERM_STEP / 2, TERM_STEP)
    level, slope = _start(z, z_err, colour, terms - term if term is not None else np.zeros(1))
    scale = np.maximum(z_err, 1.4826 * np.median(np.abs(z - level - slope * colour)) / 3)
    for _ in range(30):
        r = z - level - slope * colour
        weight = 1.0 / (z_err**2 * (1 + (r / (2 * scale)) ** 2))
        c_mean = np.average(colour, weights=weight)
        spread = np.sum(weight * (colour - c_mean) ** 2)
        if tilted and spread > 0:
            slope = float(np.sum(weight * (colour - c_mean) * z) / spread)
        level = float(np.average(z - slope * colour, weights=weight))
    residual: Floats = z - level - slope * colour
    return residual


def stars_to_set_aside(
    plain: Floats,
    residual: Floats,
    weight: Floats,
    variance: Floats,
    prior: Floats,
    colour: Floats,
    term: float,
    adopted_term_err: float | None,
) -> dict[int, str]:
    """Stars whose catalogue entry is wrong or whose light varies; never so many that fewer than 3 remain.

    Parameters
    ----------
    plain, residual
        (F, S) catalogue - measured after zero point and colour term, without and with the star's own offset.
    weight, variance
        (F, S) of the measurements that take part (else 0), and the photons' variance.
    prior, colour
        (S,) 1/catalogue error², and colour.
    term
        Colour term that was taken off.
    adopted_term_err
        Error of a colour term that was not fitted; None when it was.
    """
    total = weight.sum(axis=0)
    seen = np.flatnonzero(total > 0)
    if len(seen) < 4:
        return {}
    z = np.einsum("fs,fs->s", weight, plain)[seen] / total[seen]
    z_err = np.sqrt(1 / prior[seen] + 1 / total[seen])
    if adopted_term_err is not None:
        z_err = np.hypot(z_err, adopted_term_err * (colour[seen] - np.median(colour[seen])))
    line = _star_line(z, z_err, colour[seen], term if adopted_term_err is None and len(seen) > 4 else None)
    found: dict[int, str] = {}
    for k in np.argsort(-np.abs(line / z_err), kind="stable"):
        star = int(seen[k])
        mine = residual[:, star][weight[:, star] > 0]
        if abs(line[k]) >= WRONG_ENTRY_MAG and abs(line[k]) >= WRONG_ENTRY_SIGMA * z_err[k]:
            found[star] = f"measured {abs(line[k]):.2f} mag {'brighter' if line[k] > 0 else 'fainter'} than catalogued"
        elif len(mine) >= LEAST_FRAMES_FOR_SCATTER:
            scatter = 1.4826 * float(np.median(np.abs(mine - np.median(mine))))
            expected = float(np.sqrt(np.median(variance[:, star][weight[:, star] > 0])))
            if scatter > max(VARIABLE_MAG, 3 * expected):
                found[star] = f"varies by {scatter:.2f} mag from frame to frame"
    most = len(seen) - 3
    return dict(list(found.items())[:most])


def frame_scatter(residual: Floats, variance: Floats, standing: NDArray[np.bool_]) -> Floats:
    """(F,) extra star-to-star scatter of frames far patchier than photons allow.

    Both must be high: chi²/dof by three of its standard errors (one outlier is enough for that) and the
    median deviation (a few stars are enough for that by chance).
    """
    n = standing.sum(axis=1)
    chi = np.where(standing, residual / np.sqrt(variance), np.nan)
    size = median_absolute(chi)
    expected = np.sqrt(np.nan_to_num(_row_median(np.where(standing, variance, np.nan))))
    excess = np.sqrt(np.maximum(size**2 - 1, 0)) * expected
    dof = np.maximum(n - 1, 1)
    patchy = (np.nansum(chi**2, axis=1) / dof > 1 + 3 * np.sqrt(2 / dof)) & (size**2 > 1.5)
    return np.where((n >= 4) & patchy, np.nan_to_num(excess), 0.0)


def _row_median(values: Floats) -> Floats:
    """(F,) median ignoring NaN; NaN for an empty row."""
    result = np.full(len(values), np.nan)
    full = np.isfinite(values).any(axis=1)
    if values.shape[1] and full.any():
        result[full] = np.nanmedian(values[full], axis=1)
    return result


def median_absolute(values: Floats) -> Floats:
    """(F,) 1.4826 × median absolute value about the median."""
    return 1.4826 * _row_median(np.abs(values - _row_median(values)[:, None]))


def outlying(residual: Floats, variance: Floats, standing: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """(F, S) measurements beyond 4 sigma of a frame that has at least 4 stars."""
    centre = _row_median(np.where(standing, residual, np.nan))[:, None]
    far = np.abs(residual - np.nan_to_num(centre)) > OUTLIER_SIGMA * np.sqrt(variance)
    outlying: NDArray[np.bool_] = standing & far & (standing.sum(axis=1) >= 4)[:, None]
    return outlying


def star_scatter(residual: Floats, variance: Floats, keep: NDArray[np.bool_]) -> Floats:
    """(S,) σ_star, where the mean chi² of a star exceeds 1 by two of its own standard errors."""
    n = keep.sum(axis=0)
    many = np.maximum(n, 1)
    mean = np.where(keep, residual, 0.0).sum(axis=0) / many
    square = np.where(keep, (residual - mean) ** 2, 0.0)
    chi2 = (square / variance).sum(axis=0) / np.maximum(n - 1, 1)
    excess = square.sum(axis=0) / np.maximum(n - 1, 1) - np.where(keep, variance, 0.0).sum(axis=0) / many
    significant = (n >= LEAST_FRAMES_FOR_SCATTER) & (chi2 > 1 + 2 * np.sqrt(2 / np.maximum(n - 1, 1)))
    return np.where(significant, np.sqrt(np.maximum(excess, 0)), 0.0)
