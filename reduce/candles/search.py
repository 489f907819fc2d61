"""Where to look for maximum light: a scan over all times and decline rates that needs no starting guess."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reduce.candles.model import FIRST_PHASE, LAST_PHASE, TypeIaModel
from reduce.candles.points import Points
from reduce.records import Floats

SCAN_DM15 = (0.8, 1.0, 1.2, 1.4, 1.7)
"""Nodes of the template tables, so that the scan only interpolates in time."""
EARLIEST_D, LATEST_D = 45.0, 20.0
"""Maximum may have passed this long before a point, or come this long after it."""
SHAPE_ERROR = 0.05
"""Stands for all correlated scatter during the scan, mag."""
LARGEST_LOSS = 16.0
"""Bound of one point's loss: beyond 4 σ it no longer pulls, and a point outside the model costs as much."""
E_HOST_WIDTH = 0.5
CHUNK = 128
LEAST_POINTS = 3
"""Magnitude points that a time of maximum must leave inside the phases of the model."""


@dataclass(frozen=True, slots=True)
class Scan:
    """Loss over trial times of maximum, each with its best decline rate; shape (n,)."""

    t_max: Floats
    dm15: Floats
    loss: Floats

    @property
    def best(self) -> tuple[float, float] | None:
        """(t_max, Δm15) of the least loss, or None when no trial puts enough points inside the model."""
        if not len(self.loss):
            return None
        i = int(np.argmin(self.loss))
        return float(self.t_max[i]), float(self.dm15[i])


def scan(points: Points, z: float, model: TypeIaModel) -> Scan:
    """Bounded least squares in magnitudes (Milky Way dust removed) over t_max in steps of a day."""
    trial = _trial_times(points.mjd, z)
    nodes = np.array([int(np.argmin(np.abs(model.dm15_nodes - d))) for d in SCAN_DM15])
    # (band, phase, Δm15) of M + T + K at whole days
    table = np.array(
        [
            model.templates[band][:, nodes]
            + model.absolute_mag(band, model.dm15_nodes[nodes])[None, :]
            + model.k_correction(band, z, model.phases)[:, None]
            for band, _ in points.bands
        ]
    )
    which = np.concatenate([np.full(rows.stop - rows.start, i) for i, (_, rows) in enumerate(points.bands)])
    dust = np.concatenate(
        [np.full(rows.stop - rows.start, model.host_coefficient(band, z)) for band, rows in points.bands]
    )
    penalty = 2.0 * -model.prior.ln_dm15(model.dm15_nodes[nodes])
    loss = np.full(len(trial), np.inf)
    dm15 = np.full(len(trial), np.nan)
    for first in range(0, len(trial), CHUNK):
        part = slice(first, first + CHUNK)
        phase = (points.mjd[None, :] - trial[part, None]) / (1.0 + z)
        value = _losses(points, phase, table, which, dust, model) + penalty[None, :]
        loss[part] = value.min(axis=1)
        dm15[part] = model.dm15_nodes[nodes][np.argmin(value, axis=1)]
    return Scan(trial, dm15, loss)


def _trial_times(mjd: Floats, z: float) -> Floats:
    """Whole days from the first point, near some point, that leave enough points inside the model."""
    time = np.sort(mjd)
    near = np.arange(-EARLIEST_D, LATEST_D + 1.0)
    trial = np.unique(np.floor(time)[:, None] + near[None, :])
    first = np.searchsorted(time, trial + FIRST_PHASE * (1.0 + z), "right")
    last = np.searchsorted(time, trial + LAST_PHASE * (1.0 + z), "left")
    return np.asarray(trial[last - first >= LEAST_POINTS], float)


def _losses(
    points: Points, phase: Floats, table: Floats, which: np.ndarray, dust: Floats, model: TypeIaModel
) -> Floats:
    """Loss of shape (trial, Δm15) at ``phase`` of shape (trial, point)."""
    inside = (phase > FIRST_PHASE) & (phase < LAST_PHASE)
    place = np.clip(phase - model.phases[0], 0.0, len(model.phases) - 1.001)
    whole = place.astype(int)
    part = (place - whole)[:, :, None]
    shape = table[which[None, :], whole] * (1.0 - part) + table[which[None, :], whole + 1] * part
    residual = points.value[None, :, None] - shape
    weight = 1.0 / (points.err**2 + SHAPE_ERROR**2)
    r = dust[None, :, None]
    w = np.where(inside, weight[None, :], 0.0)[:, :, None] * np.ones(shape.shape[2])
    base = w
    # the second pass gives outliers less weight, so that one bad point cannot carry the trial away
    for _ in range(2):
        sw, swr, swrr = w.sum(1) + 1e-12, (w * r).sum(1), (w * r * r).sum(1) + 1.0 / E_HOST_WIDTH**2
        sy, syr = (w * residual).sum(1), (w * r * residual).sum(1)
        e = np.maximum((sw * syr - swr * sy) / (sw * swrr - swr**2), 0.0)
        mu = (sy - swr * e) / sw
        left = residual - mu[:, None, :] - r * e[:, None, :]
        w = base / (1.0 + base * left**2 / 9.0)
    chi2 = np.where(inside[:, :, None], np.minimum(base * left**2, LARGEST_LOSS), LARGEST_LOSS).sum(1)
    chi2 += 2.0 * e / model.prior.e_host_scale
    return np.asarray(chi2, float)
