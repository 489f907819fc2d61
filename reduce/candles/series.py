"""Points of a pulsating star as a period search and a Fourier fit take them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats, LightCurve

MJD_TO_JD = 2400000.5
LEAST_SNR = 5.0
"""Below it a magnitude's error is not Gaussian; the point is left out."""
ERROR_FLOOR_MAG = 0.002
"""No independent error of a point is smaller (common practice)."""
BAND_SIZE: Mapping[str, float] = {"B": 1.35, "V": 1.0, "R": 0.8, "I": 0.62, "g": 1.2, "r": 0.85, "i": 0.65}
"""Amplitude relative to V, alike in Cepheids and RR Lyrae stars (common practice; the fit may deviate)."""


@dataclass(frozen=True, slots=True)
class Series:
    """Magnitudes of one star in all bands, in order of time; arrays of shape (n,)."""

    time: Floats
    """Days, BJD in TDB where the light curve has it."""
    mag: Floats
    err: Floats
    """Independent from point to point."""
    err_night: Floats
    """Shared by the points of one band and night."""
    band: NDArray[np.str_]
    night: NDArray[np.str_]
    row: NDArray[np.int64]
    """Index of the point in the light curve."""

    def __len__(self) -> int:
        return len(self.time)

    @property
    def bands(self) -> tuple[str, ...]:
        """Names of the bands, sorted."""
        return tuple(sorted(set(self.band.tolist())))

    @property
    def span_d(self) -> float:
        """Time from the first to the last point."""
        return float(np.ptp(self.time)) if len(self) else 0.0

    def take(self, keep: NDArray[np.bool_] | NDArray[np.int64]) -> Series:
        """Only these points."""
        return Series(
            self.time[keep], self.mag[keep], self.err[keep], self.err_night[keep], self.band[keep],
            self.night[keep], self.row[keep],
        )  # fmt: skip


def sizes_of(series: Series) -> Floats:
    """Relative amplitude of each of the series' bands."""
    return np.array([BAND_SIZE[band] for band in series.bands])


def thinned(series: Series, most: int) -> Series:
    """At most so many points a band, evenly in order of time."""
    rows = [np.flatnonzero(series.band == band) for band in series.bands]
    kept = [r if len(r) <= most else r[np.linspace(0, len(r) - 1, most).round().astype(int)] for r in rows]
    return series.take(np.sort(np.concatenate(kept)))


def barycentric(curve: LightCurve) -> Floats:
    """Days at which the light was emitted but for a constant: BJD in TDB, or JD in UTC where that is not known."""
    utc = curve.mjd + MJD_TO_JD
    return utc if curve.bjd_tdb is None else np.where(np.isfinite(curve.bjd_tdb), curve.bjd_tdb, utc)


def series_of(curve: LightCurve, bands: tuple[str, ...]) -> Series:
    """The well-measured magnitudes of these bands; limits and weak detections carry no phase information worth it."""
    night = np.where(np.isfinite(curve.err_night), curve.err_night, 0.0)
    good = np.isin(curve.band, bands) & np.isfinite(curve.mag) & np.isfinite(curve.mjd)
    good &= np.isfinite(curve.err) & (curve.err > 0) & (curve.err < 1.0857 / LEAST_SNR)
    time = barycentric(curve)
    rows = np.flatnonzero(good)
    rows = rows[np.lexsort((curve.mag[rows], curve.band[rows], time[rows]))]
    return Series(
        time[rows], curve.mag[rows], np.maximum(curve.err[rows], ERROR_FLOOR_MAG), night[rows], curve.band[rows],
        curve.night[rows], rows.astype(np.int64),
    )  # fmt: skip
