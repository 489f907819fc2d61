"""Fourier fits of folded light curves: intensity means, amplitudes, shape parameters."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.candles.period import FineModel, design
from reduce.candles.series import Series
from reduce.records import BandMean, Floats

LARGEST_ORDER = 10
LARGEST_GAP = 0.2
"""Of phase; beyond it harmonics run free in the gap."""
LEAST_POINTS = 9
N_PHASES = 200
CLIP_SIGMA = 4.0
LEAST_FOR_CLIP = 8


@dataclass(frozen=True, slots=True)
class BandFit:
    """One band's mean magnitude and harmonics: ``coefficients`` is mean, cos 1, sin 1, …; phase 0 at ``time0``."""

    band: str
    coefficients: Floats
    covariance: Floats
    period_d: float
    time0: float
    scatter: float
    n: int
    gap: float
    covered: bool

    @property
    def order(self) -> int:
        """Number of harmonics."""
        return (len(self.coefficients) - 1) // 2

    def at(self, time: Floats) -> tuple[Floats, Floats]:
        """Magnitude and its error at times in days."""
        table = _table((time - self.time0) / self.period_d, self.order)
        variance = np.einsum("ij,jk,ik->i", table, self.covariance, table)
        return table @ self.coefficients, np.sqrt(np.maximum(variance, 0.0))

    def intensity_mean(self) -> tuple[float, float]:
        """-2.5 log10 of the mean flux over a period, and its error."""
        table = _table(np.arange(N_PHASES) / N_PHASES, self.order)
        flux = 10.0 ** (-0.4 * (table @ self.coefficients - self.coefficients[0]))
        slope = flux @ table / flux.sum()
        mean = float(self.coefficients[0] - 2.5 * math.log10(float(flux.mean())))
        return mean, math.sqrt(max(float(slope @ self.covariance @ slope), 0.0))

    def amplitude(self) -> float:
        """Peak to peak, mag."""
        return float(np.ptp(_table(np.arange(N_PHASES) / N_PHASES, self.order) @ self.coefficients))

    def shape(self) -> tuple[float, float] | None:
        """R21 and φ21 = φ2 - 2 φ1 (0 to 2π) of the cosine series Σ A_k cos(2πkφ + φ_k); None below two harmonics."""
        if self.order < 2:
            return None
        one, two = (complex(self.coefficients[2 * k - 1], -self.coefficients[2 * k]) for k in (1, 2))
        if abs(one) == 0.0:
            return None
        phi21 = (math.atan2(two.imag, two.real) - 2.0 * math.atan2(one.imag, one.real)) % (2.0 * math.pi)
        return abs(two) / abs(one), phi21

    def record(self, err_band: float) -> BandMean:
        """For the estimate."""
        mean, err = self.intensity_mean()
        r21, phi21 = self.shape() or (None, None)
        return BandMean(
            self.band, mean, err, err_band, self.amplitude(), self.n, self.order, self.gap, self.covered, r21, phi21
        )


def _table(phase: Floats, order: int) -> Floats:
    return np.column_stack([np.ones(len(phase)), design(1.0, phase, order)])


def largest_gap(phase: Floats) -> float:
    """Largest stretch of phase without a point, 1 with none or one."""
    ordered = np.sort(phase % 1.0)
    return float(np.max(np.diff(np.append(ordered, ordered[0] + 1.0)))) if len(ordered) else 1.0


def coverage(phase: Floats, reach: float = 0.05) -> float:
    """Fraction of the period that has a point within ``reach`` of phase."""
    grid = np.arange(N_PHASES) / N_PHASES
    away = np.abs((grid[:, None] - phase[None, :] + 0.5) % 1.0 - 0.5)
    return float(np.mean(away.min(axis=1) <= reach)) if len(phase) else 0.0


def fit_bands(series: Series, model: FineModel, frequency: float) -> tuple[list[BandFit], NDArray[np.bool_]]:
    """Fit every band at a common frequency; also which points stand within 4 σ.

    A band whose phases are covered gets harmonics of its own, as many as BIC allows and no gap is wider than half
    a wave of; the other ones lean on the common shape, with all harmonics held by their prior, and are marked.
    """
    period = 1.0 / frequency
    time0 = model.time0
    keep = np.ones(len(series), bool)
    fits = []
    common = model.bands_at(frequency)
    for band, (mean_first, covariance, scatter) in zip(series.bands, common, strict=True):
        rows = np.flatnonzero(series.band == band)
        phase = (series.time[rows] - time0) / period
        gap = largest_gap(phase)
        fit = None
        if len(rows) >= LEAST_POINTS and gap <= LARGEST_GAP:
            fit, kept = _own(series, rows, phase, gap)
            keep[rows] = kept
        if fit is not None:
            coefficients, own_covariance, own_scatter = fit
            fits.append(BandFit(band, coefficients, own_covariance, period, time0, own_scatter, len(rows), gap, True))
        else:
            fits.append(BandFit(band, mean_first, covariance, period, time0, scatter, len(rows), gap, False))
    return fits, keep


def _own(
    series: Series, rows: NDArray[np.int64], phase: Floats, gap: float
) -> tuple[tuple[Floats, Floats, float] | None, NDArray[np.bool_]]:
    mag, err2 = series.mag[rows], series.err[rows] ** 2 + series.err_night[rows] ** 2
    keep = np.ones(len(rows), bool)
    best: tuple[Floats, Floats, float] | None = None
    for _ in range(5):
        best, chosen = None, math.inf
        n = int(keep.sum())
        most = min(LARGEST_ORDER, (n - 3) // 2, max(int(0.5 / max(gap, 1e-3)), 2))
        for order in range(1, most + 1):
            table = _table(phase, order)
            coefficients, covariance, scatter, log_like = _weighted(table[keep], mag[keep], err2[keep])
            bic = (2 * order + 2) * math.log(n) - 2.0 * log_like
            if bic < chosen:
                chosen, best = bic, (coefficients, covariance, scatter)
        if best is None:
            return None, keep
        away = np.abs(mag - _table(phase, (len(best[0]) - 1) // 2) @ best[0]) / np.sqrt(err2 + best[2] ** 2)
        now = away <= CLIP_SIGMA if len(rows) >= LEAST_FOR_CLIP else keep
        if np.array_equal(now, keep) or now.sum() < 0.8 * len(rows):
            break
        keep = now
    return best, keep


def _weighted(table: Floats, mag: Floats, err2: Floats) -> tuple[Floats, Floats, float, float]:
    """Least squares with an extra scatter that makes χ² equal to the degrees of freedom, if it is larger."""
    free = max(len(mag) - table.shape[1], 1)
    scatter2 = 0.0
    for _ in range(20):
        w = 1.0 / (err2 + scatter2)
        normal = (table.T * w) @ table
        coefficients = np.linalg.solve(normal, table.T @ (w * mag))
        square = (mag - table @ coefficients) ** 2
        chi2 = float(w @ square)
        # Newton's step of Σ r²/(e² + s²) = dof
        step = (chi2 - free) / max(float(w**2 @ square), 1e-30)
        if abs(step) < 1e-9 or (scatter2 == 0.0 and step <= 0.0):
            break
        scatter2 = max(scatter2 + step, 0.0)
    log_like = 0.5 * float(np.log(w).sum()) - 0.5 * chi2
    covariance = np.asarray(np.linalg.inv(normal), np.float64)
    return np.asarray(coefficients, np.float64), covariance, math.sqrt(scatter2), log_like
