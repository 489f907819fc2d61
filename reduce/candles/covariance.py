"""The covariance of type Ia points: three levels of photometric error, and how supernovae differ."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reduce.candles.model import TypeIaModel
from reduce.candles.points import Points
from reduce.records import Floats

PASSBAND_ERROR, PASSBAND_ERROR_LATE_I, LATE_I_D = 0.03, 0.05, 15.0
"""mag; in I from this rest-frame day on. Measured on the training surveys, whose corrections for their passbands reach
0.1 mag after maximum.
"""


@dataclass(frozen=True, slots=True)
class Covariance:
    """Three parts, each (n, n) in mag²; ``total`` is their sum."""

    photometry: Floats
    """Independent errors, and those shared by one band and night."""
    zero_points: Floats
    """Shared by all nights of a band of one source, unknown passbands included."""
    supernova: Floats
    """Template and colour scatter."""

    @property
    def total(self) -> Floats:
        """Covariance that the fit uses."""
        return self.photometry + self.zero_points + self.supernova


def covariance(points: Points, phase: Floats, model: TypeIaModel) -> Covariance:
    """Covariance of magnitude points at rest-frame days ``phase``.

    Independent variance err² + nugget²; template scatter s_X s_Y exp(-|Δp|/7 d), times 0.3 between bands;
    colour scatter within a band, zero points within a band of one source. ``err_night`` joins points of one band
    and night.
    """
    scatter = model.scatter
    # integers, because comparing n² strings costs more than the rest of the fit
    columns = (points.band, points.night, points.source)
    band, night, source = (np.unique(names, return_inverse=True)[1] for names in columns)
    same_band = band[:, None] == band[None, :]
    same_zero_point = same_band & (source[:, None] == source[None, :])
    same_night = same_zero_point & (night[:, None] == night[None, :])
    photometry = np.diag(points.err**2 + scatter.nugget**2)
    photometry += np.where(same_night, np.outer(points.err_night, points.err_night), 0.0)
    passband = passband_error(points, phase)
    shared = np.outer(points.err_band, points.err_band) + np.outer(passband, passband)
    zero_points = np.where(same_zero_point, shared, 0.0)

    sigma = model.shape_scatter(points.bands, phase)
    nearness = np.exp(-np.abs(phase[:, None] - phase[None, :]) / scatter.correlation_days)
    colour = np.array([scatter.colour[name] for name in points.band.tolist()])
    supernova = np.outer(sigma, sigma) * nearness * np.where(same_band, 1.0, scatter.between_bands)
    supernova += np.where(same_band, np.outer(colour, colour), 0.0)
    return Covariance(photometry, zero_points, supernova)


def passband_error(points: Points, phase: Floats) -> Floats:
    """What unknown passbands leave in each point (mag), shared by a band: its stars' colours are no supernova's."""
    late_i = (points.band == "I") & (phase > LATE_I_D)
    return np.where(points.by_colour_terms, np.where(late_i, PASSBAND_ERROR_LATE_I, PASSBAND_ERROR), 0.0)
