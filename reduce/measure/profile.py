"""The radial profile of one star, for the eye."""

from __future__ import annotations

import numpy as np

from reduce.records import Image
from reduce.views import RadialProfile

SKY_FROM, SKY_TO = 1.5, 2.0
"""Annulus of the sky, in radii of the profile."""


def radial_profile(image: Image, x_px: float, y_px: float, radius_px: float) -> RadialProfile:
    """Pixels within a radius of a position, above the median of an annulus about it.

    Parameters
    ----------
    image
        (ny, nx) raw counts.
    x_px, y_px
        0-based centre.
    radius_px
        Of the largest ring.

    Returns
    -------
    RadialProfile
        Empty where the position lies off the image.
    """
    reach = SKY_TO * radius_px
    ny, nx = image.shape
    x0, x1 = max(int(x_px - reach), 0), min(int(x_px + reach) + 2, nx)
    y0, y1 = max(int(y_px - reach), 0), min(int(y_px + reach) + 2, ny)
    if x1 <= x0 or y1 <= y0:
        return RadialProfile((), (), (), ())
    light = np.asarray(image[y0:y1, x0:x1], float)
    radius = np.hypot(np.arange(x0, x1)[None, :] - x_px, np.arange(y0, y1)[:, None] - y_px)
    usable = np.isfinite(light)
    about = light[usable & (radius >= SKY_FROM * radius_px) & (radius <= reach)]
    inside = usable & (radius <= radius_px)
    if not about.size or not inside.any():
        return RadialProfile((), (), (), ())
    order = np.argsort(radius[inside], kind="stable")
    r, above = radius[inside][order], (light[inside] - np.median(about))[order]
    ring = r.astype(int)
    present = np.unique(ring)
    medians = [float(np.median(above[ring == n])) for n in present]
    return RadialProfile(tuple(r.tolist()), tuple(above.tolist()), tuple((present + 0.5).tolist()), tuple(medians))
