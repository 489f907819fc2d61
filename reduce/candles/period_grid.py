"""The log evidence of hundreds of thousands of frequencies at once, by a coarse model of three harmonics."""

from __future__ import annotations

import numpy as np

from reduce.candles.series import Series, sizes_of, thinned
from reduce.records import Floats

STEP_PER_SPAN = 0.1
"""Frequency step times the length of the series."""
COARSE_HARMONICS = 3
COARSE_JITTER_MAG = 0.03
"""Scatter that the coarse model leaves: its missing harmonics, bands that do not follow the common shape."""
COARSE_PRIOR_MAG = (0.2, 0.1, 0.05)
"""Prior standard deviation of both coefficients of each harmonic in the coarse model, V."""
MOST_COARSE_POINTS = 150
"""A band; more do not change which peaks stand out."""
ROWS, COLUMNS = 8, 256
"""Frequencies are taken ROWS × COLUMNS at a time."""


def frequency_grid(series: Series, shortest_d: float, longest_d: float) -> tuple[float, float, int]:
    """First frequency, step and number of steps; no period longer than twice the series is looked for."""
    span = max(series.span_d, 1e-6)
    step = STEP_PER_SPAN / span
    first = max(1.0 / longest_d, 0.5 / span)
    return first, step, max(int((1.0 / shortest_d - first) / step) + 1, 1)


def coarse_evidence(series: Series, first: float, step: float, n: int) -> Floats:
    """(n,) log evidence of each frequency of an even grid, with COARSE_HARMONICS and one common shape.

    exp(2πi f t) on an even grid is an outer product of two short lists, so all sums over the points are matrix
    products.
    """
    thin = thinned(series, MOST_COARSE_POINTS)
    bands = [_CoarseBand(thin, band, size, step) for band, size in zip(thin.bands, sizes_of(thin), strict=True)]
    scale = np.repeat(COARSE_PRIOR_MAG, 2)
    out = np.empty(n)
    for start in range(0, n, ROWS * COLUMNS):
        count = min(ROWS * COLUMNS, n - start)
        rows = first + step * (start + COLUMNS * np.arange(-(-count // COLUMNS), dtype=np.float64))
        normal, right = bands[0].sums(rows)
        for band in bands[1:]:
            more_normal, more_right = band.sums(rows)
            normal += more_normal
            right += more_right
        normal *= np.multiply.outer(scale, scale)[:, :, None]
        right *= scale[:, None]
        out[start : start + count] = _log_evidence(normal, right)[:count]
    return out


def _log_evidence(normal: Floats, right: Floats) -> Floats:
    """½ bᵀ(N + 1)⁻¹b − ½ log|N + 1| for many small matrices at once, last axis; by LDLᵀ, in place."""
    size = len(right)
    gain, log_det = np.zeros(right.shape[1]), np.zeros(right.shape[1])
    for i in range(size):
        pivot = normal[i, i] + 1.0
        gain += right[i] ** 2 / pivot
        log_det += np.log(pivot)
        for j in range(i + 1, size):
            factor = normal[i, j] / pivot
            right[j] -= factor * right[i]
            for k in range(j, size):
                normal[j, k] -= factor * normal[i, k]
    return 0.5 * (gain - log_det)


class _CoarseBand:
    """Sums over one band's points for many frequencies."""

    def __init__(self, series: Series, band: str, size: float, step: float) -> None:
        mine = series.band == band
        self.time = series.time[mine] - series.time[0]
        self.weight = size**2 / (series.err[mine] ** 2 + COARSE_JITTER_MAG**2)
        self.total = float(self.weight.sum())
        self.y = (series.mag[mine] - float(self.weight @ series.mag[mine]) / self.total) / size
        ladder = 2j * np.pi * step * np.outer(self.time, np.arange(COLUMNS))
        self.columns = [np.exp(m * ladder) for m in range(1, 2 * COARSE_HARMONICS + 1)]

    def sums(self, rows: Floats) -> tuple[Floats, Floats]:
        """Upper triangle of the centred normal matrix (2h, 2h, n) and right side (2h, n); n = rows × COLUMNS."""
        h = COARSE_HARMONICS
        wave = np.exp(2j * np.pi * np.outer(rows, self.time))
        turned = np.full_like(wave, 1.0)
        moment = [np.full(len(rows) * COLUMNS, self.total, complex)]
        right = np.empty((2 * h, len(rows) * COLUMNS))
        for m in range(1, 2 * h + 1):
            turned *= wave
            moment.append(((self.weight * turned) @ self.columns[m - 1]).ravel())
            if m <= h:
                of_y = ((self.weight * self.y * turned) @ self.columns[m - 1]).ravel()
                right[2 * m - 2], right[2 * m - 1] = of_y.real, of_y.imag
        normal = np.zeros((2 * h, 2 * h, right.shape[1]))
        for j in range(1, h + 1):
            for k in range(j, h + 1):
                plus, minus = moment[j + k], moment[k - j]
                (cj, sj), (ck, sk) = ((moment[m].real, moment[m].imag) for m in (j, k))
                normal[2 * j - 2, 2 * k - 2] = 0.5 * (plus.real + minus.real) - cj * ck / self.total
                normal[2 * j - 1, 2 * k - 1] = 0.5 * (minus.real - plus.real) - sj * sk / self.total
                normal[2 * j - 2, 2 * k - 1] = 0.5 * (plus.imag + minus.imag) - cj * sk / self.total
                if k > j:
                    normal[2 * j - 1, 2 * k - 2] = 0.5 * (plus.imag - minus.imag) - sj * ck / self.total
        return normal, right
