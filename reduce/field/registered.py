"""One frame laid on the pixels of another, for looking at: nothing is measured on it."""

from __future__ import annotations

import numpy as np

from reduce.field.wcs import pixel_to_sky, sky_to_pixel
from reduce.records import FieldSolution, Image

_NODES = 5
"""Nodes a side from which the way between the frames is found; two gnomonic frames differ by less than 0.1 px from it
over the degree that a frame spans."""


def registered(image: Image, own: FieldSolution, onto: FieldSolution, nx: int, ny: int) -> Image:
    """The nearest pixel of ``image`` for each pixel of another frame.

    Parameters
    ----------
    image
        (rows, columns) of any unit.
    own, onto
        Plate solutions of ``image`` and of the other frame.
    nx, ny
        Size of the other frame.

    Returns
    -------
    Image
        (ny, nx), NaN where ``image`` does not reach.
    """
    x, y = (g.ravel() for g in np.meshgrid(np.linspace(0, nx - 1, _NODES), np.linspace(0, ny - 1, _NODES)))
    there_x, there_y = sky_to_pixel(own, *pixel_to_sky(onto, x, y))
    design = np.column_stack([np.ones_like(x), x, y])
    known = np.isfinite(there_x) & np.isfinite(there_y)
    result = np.full((ny, nx), np.nan, np.float32)
    if known.sum() < 3:  # the far side of the sky
        return result
    way = np.linalg.lstsq(design[known], np.column_stack([there_x, there_y])[known], rcond=None)[0]
    columns = np.arange(nx, dtype=np.float32)
    for row in range(ny):
        at_x = np.rint(way[0, 0] + way[1, 0] * columns + way[2, 0] * row).astype(np.int64)
        at_y = np.rint(way[0, 1] + way[1, 1] * columns + way[2, 1] * row).astype(np.int64)
        inside = (at_x >= 0) & (at_x < image.shape[1]) & (at_y >= 0) & (at_y < image.shape[0])
        result[row, inside] = image[at_y[inside], at_x[inside]]
    return result
