"""Which points a fit uses, and how: magnitudes where they are well measured, flux where they are not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.candles.model import BandRows, TypeIaModel
from reduce.records import FLUX_ZERO_POINT, Floats, LightCurve

LEAST_SNR = 5.0
"""Below it a magnitude's error is not Gaussian: the flux is used."""
LARGEST_MJD = 1e6
"""Larger numbers, infinity and NaN are no dates."""
MAG_PER_RELATIVE_FLUX = 2.5 / np.log(10.0)
ZERO_POINT_WITHOUT_BLUE = 0.03
"""Zero-point error of a band (mag) when neither B nor g is there to hold the colour."""


@dataclass(frozen=True, slots=True)
class Points:
    """Points of one kind in arrays of shape (n,), ordered by band, then time."""

    bands: BandRows
    mjd: Floats
    band: NDArray[np.str_]
    night: NDArray[np.str_]
    value: Floats
    """Magnitude or flux (zero point 25), as observed."""
    err: Floats
    """Independent error in the unit of ``value``."""
    err_night: Floats
    err_band: Floats
    """mag; the model's default where the input states none."""

    def __len__(self) -> int:
        return len(self.mjd)

    def take(self, keep: NDArray[np.bool_]) -> Points:
        """Only the points where ``keep`` is true."""
        return _ordered(
            self.mjd[keep], self.band[keep], self.night[keep], self.value[keep], self.err[keep],
            self.err_night[keep], self.err_band[keep],
        )  # fmt: skip


def _ordered(mjd: Floats, band: NDArray[np.str_], night: NDArray[np.str_], value: Floats, *errors: Floats) -> Points:
    order = np.lexsort((errors[0], value, mjd, band))
    band = band[order]
    names = sorted(set(band.tolist()))
    edges = [(name, int(np.searchsorted(band, name)), int(np.searchsorted(band, name, "right"))) for name in names]
    rows = tuple((name, slice(first, last)) for name, first, last in edges)
    return Points(rows, mjd[order], band, night[order], value[order], *(error[order] for error in errors))


def select(curve: LightCurve, model: TypeIaModel) -> tuple[Points, Points]:
    """Split a light curve into magnitude points (S/N ≥ 5) and flux points (limits, weak detections).

    Points of bands the model does not know, or without any usable number, are left out.
    """
    known = np.isin(curve.band, model.bands) & (np.abs(curve.mjd) < LARGEST_MJD)
    has_mag = known & np.isfinite(curve.mag) & np.isfinite(curve.err) & (curve.err > 0)
    has_flux = known & np.isfinite(curve.flux) & np.isfinite(curve.flux_err) & (curve.flux_err > 0)
    err_from_mag = np.where(has_mag, curve.err, np.inf)
    snr = MAG_PER_RELATIVE_FLUX / err_from_mag
    as_mag = has_mag & (snr >= LEAST_SNR)

    from_mag = 10.0 ** (-0.4 * (np.where(has_mag, curve.mag, 99.0) - FLUX_ZERO_POINT))
    flux = np.where(has_flux, curve.flux, from_mag)
    flux_err = np.where(has_flux, curve.flux_err, from_mag / np.where(has_mag, snr, 1.0))
    as_flux = (has_mag | has_flux) & ~as_mag

    blue = bool(np.isin(curve.band[as_mag], ("B", "g")).any())
    default = model.scatter.zero_point if blue else ZERO_POINT_WITHOUT_BLUE
    err_band = np.where(np.isfinite(curve.err_band), curve.err_band, default)
    err_night = np.where(np.isfinite(curve.err_night), curve.err_night, 0.0)

    def chosen(mask: NDArray[np.bool_], value: Floats, err: Floats) -> Points:
        return _ordered(
            curve.mjd[mask], curve.band[mask], curve.night[mask], value[mask], err[mask], err_night[mask],
            err_band[mask],
        )  # fmt: skip

    return chosen(as_mag, curve.mag, curve.err), chosen(as_flux, flux, flux_err)
