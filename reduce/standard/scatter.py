"""How much larger a scatter is than its errors say."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats


def additive_floor(residuals: Floats, errors: Floats, dof: float) -> float:
    """Error s that makes ``sum r² / (e² + s²) = dof``; 0 when chi² is below dof already.

    Parameters
    ----------
    residuals, errors
        (n,) in one unit; errors must be positive.
    dof
        Degrees of freedom, positive.
    """
    squares, variances = residuals**2, errors**2

    def excess(floor: float) -> float:
        return float(np.sum(squares / (variances + floor))) - dof

    if len(residuals) == 0 or dof <= 0 or excess(0.0) <= 0:
        return 0.0
    low, high = 0.0, float(np.sum(squares)) / dof
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) > 0 else (low, middle)
    return float(np.sqrt(0.5 * (low + high)))


UNKNOWN_NIGHT_SCATTER_MAG = 0.003
"""Where too few nights were seen to measure it (common practice)."""
LEAST_NIGHTS = 3
LEAST_DOF = 20


def repeatability(deviation: Floats, err: Floats, night: NDArray[np.int64]) -> tuple[float, float]:
    """What one star scatters beyond its photons, measured on the comparison stars themselves.

    Parameters
    ----------
    deviation, err
        (F, S) measured - mean of the star, and its photon error; NaN where a star did not take part.
    night
        (F,) number of each frame's night.

    Returns
    -------
    frame_mag, night_mag
        From frame to frame (flat field under a moving star, image shape), and from night to night in a star's
        nightly mean (what the repeats of a night share).
    """
    means, mean_errs, within, within_err, lost = [], [], [], [], 0
    nights = sorted(set(night.tolist()))
    for one in nights:
        rows, errs = deviation[night == one], err[night == one]
        seen = np.isfinite(rows)
        n = seen.sum(axis=0)
        mean = np.where(seen, rows, 0.0).sum(axis=0) / np.maximum(n, 1)
        repeated = seen & (n >= 2)
        within.append((rows - mean)[repeated])
        within_err.append(errs[repeated])
        lost += int((n >= 2).sum()) + int(repeated.any(axis=1).sum()) - int(repeated.any())
        means.append(np.where(n > 0, mean, np.nan))
        mean_errs.append(np.sqrt(np.where(seen, errs**2, 0.0).sum(axis=0)) / np.maximum(n, 1))
    inner, inner_err = np.concatenate(within), np.concatenate(within_err)
    dof = len(inner) - lost
    frame_mag = additive_floor(inner, inner_err, dof) if dof >= LEAST_DOF else 0.0
    mean_table, err_table = np.array(means), np.array(mean_errs)
    repeats = np.array([[np.isfinite(deviation[night == one]).sum(axis=0)] for one in nights])[:, 0]
    err_table = np.sqrt(err_table**2 + frame_mag**2 / np.maximum(repeats, 1))
    used = np.isfinite(mean_table)
    night_dof = int(used.sum()) - int(used.any(axis=0).sum()) - len(nights) + 1
    if len(nights) < LEAST_NIGHTS or night_dof < LEAST_DOF:
        return frame_mag, UNKNOWN_NIGHT_SCATTER_MAG
    return frame_mag, additive_floor(mean_table[used], err_table[used], night_dof)
