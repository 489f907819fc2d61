"""Which points a fit uses, and how: magnitudes where they are well measured, flux where they are not."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.candles.model import BandRows, TypeIaModel
from reduce.records import FLUX_ZERO_POINT, Floats, LightCurve

LEAST_SNR = 5.0
"""Below it a magnitude's error is not Gaussian: the flux is used."""
LEAST_ERR = 1e-6
"""mag; smaller errors mean nothing beside the scatter of supernovae."""
LARGEST_MJD = 1e6
"""Larger numbers, infinity and NaN are no dates."""
MAG_PER_RELATIVE_FLUX = 2.5 / np.log(10.0)
FLUX_NOISE_BIAS = 1.5 / MAG_PER_RELATIVE_FLUX
"""A magnitude with a Gaussian error taken from its own flux draws the fit towards bright values by this times err²: the
logarithm gives away half of σ²/flux², the weights, larger for points that scatter up, gain twice as much. 0.065 mag at
S/N 5, 0.004 at 20.
"""
ZERO_POINT_WITHOUT_BLUE = 0.03
"""Zero-point error of a band (mag) when neither B nor g is there to hold the colour."""
SOURCE_OFFSET = 0.03
"""Prior width (mag) of the zero-point offset of another observatory's band that states no error of its own; R and I of
well-kept surveys agree to 0.02 to 0.04 mag.
"""
FREE_OFFSET = 0.5
"""The same where the prior is switched off."""


@dataclass(frozen=True, slots=True)
class Points:
    """Points of one kind in arrays of shape (n,), ordered by band, then time."""

    bands: BandRows
    mjd: Floats
    band: NDArray[np.str_]
    night: NDArray[np.str_]
    value: Floats
    """Magnitude, freed of the bias of its noise, or flux (zero point 25)."""
    err: Floats
    """Independent error in the unit of ``value``."""
    err_night: Floats
    err_band: Floats
    """mag, shared by the points of one source and band; the default where the input states none."""
    source: NDArray[np.str_]
    """Empty for own points."""
    by_colour_terms: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.mjd)

    def take(self, keep: NDArray[np.bool_]) -> Points:
        """Only the points where ``keep`` is true."""
        return _ordered(
            self.mjd[keep], self.band[keep], self.night[keep], self.value[keep], self.err[keep],
            self.err_night[keep], self.err_band[keep], self.source[keep], self.by_colour_terms[keep],
        )  # fmt: skip


def _ordered(mjd: Floats, band: NDArray[np.str_], night: NDArray[np.str_], value: Floats, *more: Any) -> Points:
    order = np.lexsort((more[2], more[0], value, more[3], mjd, band))
    band = band[order]
    names = sorted(set(band.tolist()))
    edges = [(name, int(np.searchsorted(band, name)), int(np.searchsorted(band, name, "right"))) for name in names]
    rows = tuple((name, slice(first, last)) for name, first, last in edges)
    return Points(rows, mjd[order], band, night[order], value[order], *(column[order] for column in more))


def select(curve: LightCurve, model: TypeIaModel, offset_prior: bool = True) -> tuple[Points, Points]:
    """Split a light curve into magnitude points (S/N ≥ 5) and flux points (limits, weak detections).

    Points of bands the model does not know, or without any usable number, are left out.

    Parameters
    ----------
    offset_prior
        False: the zero points of other observatories' bands are free instead of held near 0.
    """
    known = np.isin(curve.band, model.bands) & (np.abs(curve.mjd) < LARGEST_MJD)
    has_mag = known & np.isfinite(curve.mag) & np.isfinite(curve.err) & (curve.err > 0)
    has_flux = known & np.isfinite(curve.flux) & np.isfinite(curve.flux_err) & (curve.flux_err > 0)
    err_from_mag = np.where(has_mag, np.maximum(curve.err, LEAST_ERR), np.inf)
    snr = MAG_PER_RELATIVE_FLUX / err_from_mag
    as_mag = has_mag & (snr >= LEAST_SNR)

    from_mag = 10.0 ** (-0.4 * (np.where(has_mag, curve.mag, 99.0) - FLUX_ZERO_POINT))
    flux = np.where(has_flux, curve.flux, from_mag)
    flux_err = np.where(has_flux, curve.flux_err, from_mag / np.where(has_mag, snr, 1.0))
    as_flux = (has_mag | has_flux) & ~as_mag

    blue = bool(np.isin(curve.band[as_mag], ("B", "g")).any())
    default = model.scatter.zero_point if blue else ZERO_POINT_WITHOUT_BLUE
    source = np.full(len(curve), "", "U1") if curve.source is None else curve.source
    several = len(set(source[has_mag | has_flux].tolist())) > 1
    stated = np.isfinite(curve.err_band)
    err_band = np.where(stated, curve.err_band, default)
    if several:
        width = np.where(stated, curve.err_band, SOURCE_OFFSET) if offset_prior else FREE_OFFSET
        err_band = np.where(source == "", err_band, width)
    by_colour_terms = np.zeros(len(curve), bool) if curve.by_colour_terms is None else curve.by_colour_terms
    err_night = np.where(np.isfinite(curve.err_night), curve.err_night, 0.0)

    def chosen(mask: NDArray[np.bool_], value: Floats, err: Floats) -> Points:
        return _ordered(
            curve.mjd[mask], curve.band[mask], curve.night[mask], value[mask], err[mask], err_night[mask],
            err_band[mask], source[mask], by_colour_terms[mask],
        )  # fmt: skip

    unbiased = curve.mag + FLUX_NOISE_BIAS * np.where(as_mag, curve.err, 0.0) ** 2
    return chosen(as_mag, unbiased, curve.err), chosen(as_flux, flux, flux_err)
