"""Residual images: what a saturated star leaves behind on a detector for the next frame.

Nothing on the frame itself tells such a ghost from a star. Where the telescope has moved in between, whatever stands
where a saturated star stood on the frame before of the same camera is therefore flagged, nothing else.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from itertools import pairwise

import numpy as np

from reduce.measure.aperture import ladder_radii_px
from reduce.records import Measured, StarFlag

FADES_AFTER_D = 20.0 / 1440.0
"""A trapped charge leaks out in minutes (common practice)."""
GHOST_FWHM = 2.0
"""Radius of the saturated core that is left behind."""


def mark_residual_images(rows: Iterable[Measured]) -> list[Measured]:
    """The same frames in the same order, StarFlag.RESIDUAL_IMAGE set where a ghost may lie in an aperture."""
    rows = list(rows)
    order = sorted(
        (k for k, row in enumerate(rows) if row.info is not None and row.info.mjd_mid is not None),
        key=lambda k: (rows[k].info.camera, rows[k].info.mjd_mid, rows[k].frame),  # type: ignore[union-attr]
    )
    for before, after in pairwise(order):
        marked = _marked(rows[before], rows[after])
        if marked is not None:
            rows[after] = marked
    return rows


def _marked(before: Measured, after: Measured) -> Measured | None:
    """``after`` with flags, or None where nothing is to be flagged."""
    first, second = before.info, after.info
    if first is None or second is None or before.quality is None or after.quality is None or after.solution is None:
        return None
    if first.mjd_mid is None or second.mjd_mid is None or not before.quality.saturated_px or len(after.stars) == 0:
        return None
    if first.camera != second.camera or (first.nx, first.ny) != (second.nx, second.ny):
        return None
    if second.mjd_mid - first.mjd_mid > FADES_AFTER_D:
        return None
    ghosts, fwhm_px = np.array(before.quality.saturated_px), after.quality.fwhm_px
    full = np.array(after.quality.saturated_px).reshape(-1, 2)
    moved = np.hypot(*(ghosts[:, None] - full[None]).transpose(2, 0, 1)).min(axis=1, initial=np.inf) > fwhm_px
    ghosts = ghosts[moved]
    if len(ghosts) == 0 or not np.isfinite(fwhm_px):
        return None
    off = np.hypot(
        after.stars["x_px"][:, None] - ghosts[None, :, 0], after.stars["y_px"][:, None] - ghosts[None, :, 1]
    ).min(axis=1)
    radii = ladder_radii_px(fwhm_px, after.solution.scale_arcsec)
    core = GHOST_FWHM * before.quality.fwhm_px
    hit = off[:, None] < radii + core
    if not hit.any():
        return None
    stars = after.stars.copy()
    stars["flags"] |= np.where(hit, int(StarFlag.RESIDUAL_IMAGE), 0).astype(np.uint32)
    stars["psf_flags"] |= np.where(off < 2.0 * fwhm_px + core, int(StarFlag.RESIDUAL_IMAGE), 0).astype(np.uint32)
    return replace(after, stars=stars)
