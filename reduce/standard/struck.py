"""Cosmic rays on stars' cores: no sharper than the star, they show only against its image.

The fit of the PSF leaves struck pixels out, an aperture does not. Where it left some out *and* the aperture holds more
light than the fit says, by more than both errors, that aperture is flagged.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.records import StarFlag

LEAST_STARS, LEAST_SNR = 5, 30.0
STRUCK_SIGMA = 4.0
LEAST_SCATTER = 0.005
"""Relative; the image differs by so much from star to star (common practice)."""


def mark_struck(table: NDArray[Any]) -> NDArray[Any]:
    """STAR_DTYPE rows of one frame, StarFlag.COSMIC_RAY set for the apertures that a cosmic ray brightened."""
    psf, psf_err = table["psf_flux_e"], table["psf_flux_err_e"]
    fitted = (psf_err > 0) & (psf > 0)
    suspects = fitted & (table["psf_rejected"] > 0)
    clean = fitted & (table["role"] == 0) & (table["psf_rejected"] == 0) & (psf > LEAST_SNR * psf_err)
    clean &= (table["flags"] == 0).all(axis=1) & np.isfinite(table["flux_e"]).all(axis=1)
    if clean.sum() < LEAST_STARS or not suspects.any():
        return table
    shares = table["flux_e"][clean] / psf[clean][:, None]
    share = np.median(shares, axis=0)
    scatter = np.hypot(LEAST_SCATTER, 1.4826 * np.median(np.abs(shares - share), axis=0))
    light, model = table["flux_e"][suspects], share * psf[suspects][:, None]
    # The two share their photons, so this is more than the error of their difference.
    err2 = table["flux_err_e"][suspects] ** 2 + (share * psf_err[suspects][:, None]) ** 2 + (scatter * model) ** 2
    struck = light - model > STRUCK_SIGMA * np.sqrt(err2)
    if not struck.any():
        return table
    marked = table.copy()
    marked["flags"][suspects] |= np.where(struck, int(StarFlag.COSMIC_RAY), 0).astype(np.uint32)
    return marked
