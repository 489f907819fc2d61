"""How much light of its neighbours falls into a star's apertures."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats, Image
from reduce.stars.stamps import cut_out

REACH_FWHM = 5.0
"""Neighbours farther outside an aperture do not count."""
BETA = 3.0
"""Moffat index of the wings assumed for neighbours: on the generous side for real images."""


def neighbour_light(
    data_e: Image, table: NDArray[Any], neighbours_xy: Floats, fwhm_px: float, radii_px: Floats
) -> Floats:
    """Neighbours' light in each aperture over the star's own light, (n, len(radii)).

    Brightness is compared by the mean of the middle 3 × 3 pixels. Of a neighbour's light, the half plane beyond the
    nearest point of the aperture counts: at most half of what lies outside that distance.
    """
    share = np.zeros((len(table), len(radii_px)))
    x, y = table["x_px"], table["y_px"]
    apart = np.hypot(neighbours_xy[None, :, 0] - x[:, None], neighbours_xy[None, :, 1] - y[:, None])
    star, other = np.nonzero((apart > fwhm_px) & (apart < radii_px.max() + REACH_FWHM * fwhm_px))
    if len(star) == 0:
        return share
    own = np.nan_to_num(_height(data_e, x, y) - table["sky_e_px"])
    floor = np.nan_to_num(table["sky_sigma_e_px"])  # 3 σ of a mean of nine pixels
    theirs = _height(data_e, neighbours_xy[:, 0], neighbours_xy[:, 1])
    ratio = np.maximum(np.nan_to_num(theirs[other] - table["sky_e_px"][star]), 0.0)
    ratio /= np.maximum(np.maximum(own, floor)[star], 1e-9)
    core = fwhm_px / (2.0 * (2.0 ** (1.0 / BETA) - 1.0) ** 0.5)
    gap = (apart[star, other][:, None] - radii_px) / core
    beyond = 0.5 * (1.0 + gap**2) ** (1.0 - BETA)
    np.add.at(share, star, ratio[:, None] * np.where(gap > 0, beyond, 1.0 - beyond))
    return share


def _height(data_e: Image, x_px: Floats, y_px: Floats) -> Floats:
    """Mean of the middle 3 × 3 pixels; outside the image nothing."""
    return np.asarray(cut_out(data_e, x_px, y_px, 1, 0.0).astype(float).mean(axis=(1, 2)))
