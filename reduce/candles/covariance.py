"""The covariance of type Ia points: three levels of photometric error, and how supernovae differ."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from reduce.candles.model import TypeIaModel
from reduce.candles.points import Points
from reduce.records import Floats


@dataclass(frozen=True, slots=True)
class Covariance:
    """Three parts, each (n, n) in mag²; ``total`` is their sum."""

    photometry: Floats
    """Independent errors, and those shared by one band and night."""
    zero_points: Floats
    """Shared by all nights of a band."""
    supernova: Floats
    """Template and colour scatter."""

    @property
    def total(self) -> Floats:
        """Covariance that the fit uses."""
        return self.photometry + self.zero_points + self.supernova


def covariance(points: Points, phase: Floats, model: TypeIaModel) -> Covariance:
    """Covariance of magnitude points at rest-frame days ``phase``.

    Independent variance err² + nugget²; template scatter s_X s_Y exp(-|Δp|/7 d), times 0.3 between bands;
    colour scatter and zero points within a band. ``err_night`` joins points of one band and night.
    """
    scatter = model.scatter
    # integers, because comparing n² strings costs more than the rest of the fit
    band, night = (np.unique(names, return_inverse=True)[1] for names in (points.band, points.night))
    same_band = band[:, None] == band[None, :]
    same_night = same_band & (night[:, None] == night[None, :])
    photometry = np.diag(points.err**2 + scatter.nugget**2)
    photometry += np.where(same_night, np.outer(points.err_night, points.err_night), 0.0)
    zero_points = np.where(same_band, np.outer(points.err_band, points.err_band), 0.0)

    sigma = model.shape_scatter(points.bands, phase)
    nearness = np.exp(-np.abs(phase[:, None] - phase[None, :]) / scatter.correlation_days)
    colour = np.array([scatter.colour[name] for name in points.band.tolist()])
    supernova = np.outer(sigma, sigma) * nearness * np.where(same_band, 1.0, scatter.between_bands)
    supernova += np.where(same_band, np.outer(colour, colour), 0.0)
    return Covariance(photometry, zero_points, supernova)
