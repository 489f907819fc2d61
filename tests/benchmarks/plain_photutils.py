"""The least that gives a magnitude: photutils along its own guide, for comparison of speed only.

No noise model, no flags, no growth curve, one radius, and a field that must be known beforehand.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.stats import SigmaClip, sigma_clipped_stats
from numpy.typing import NDArray
from photutils.aperture import ApertureStats, CircularAnnulus, CircularAperture, aperture_photometry
from photutils.background import Background2D, MedianBackground
from photutils.centroids import centroid_sources
from photutils.detection import DAOStarFinder


def measure(
    path: Path,
    bias: NDArray[np.float32],
    dark: NDArray[np.float32],
    flat: NDArray[np.float32],
    gain: float,
    fwhm: float,
) -> NDArray[np.float64]:
    """Instrumental magnitudes of all stars of one frame."""
    with fits.open(path) as file:
        raw = file[0].data.astype(np.float32)
    data = (raw - bias - dark) / flat * gain
    sky = Background2D(data, 64, bkg_estimator=MedianBackground(), sigma_clip=SigmaClip(3.0))
    clean = data - sky.background
    _, _, sigma = sigma_clipped_stats(clean, sigma=3.0)
    found = DAOStarFinder(threshold=5.0 * sigma, fwhm=fwhm)(clean)
    ny, nx = clean.shape
    # Columns by place: their names changed between versions.
    x, y = (np.asarray(found.columns[column]) for column in (1, 2))
    inside = (x > fwhm) & (x < nx - 1 - fwhm) & (y > fwhm) & (y < ny - 1 - fwhm)
    x, y = centroid_sources(clean, x[inside], y[inside], box_size=2 * round(fwhm) + 1)
    good = np.isfinite(x) & np.isfinite(y)
    places = np.column_stack([x[good], y[good]])
    ring = CircularAnnulus(places, 4.0 * fwhm, 7.0 * fwhm)
    level = ApertureStats(data, ring, sigma_clip=SigmaClip(3.0)).median
    disc = CircularAperture(places, 1.5 * fwhm)
    flux = np.asarray(aperture_photometry(data, disc)["aperture_sum"]) - level * disc.area
    with np.errstate(invalid="ignore", divide="ignore"):
        return -2.5 * np.log10(flux)
