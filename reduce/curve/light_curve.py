"""Points as the arrays that a fit takes."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from reduce.records import LightCurve, Point


def to_light_curve(points: Iterable[Point]) -> LightCurve:
    """Kept points and limits, ordered by time and band; everything else is left out.

    ``night`` is the point's zero-point group, so that two cameras of one night do not share an error. An
    error that a point does not state is 0 (``err_night``) or NaN (``err_band``).
    """
    taken = sorted(
        (point for point in points if point.state in ("kept", "limit")),
        key=lambda point: (point.mjd, point.band, point.star, point.file or "", point.zp_group),
    )

    def column(values: Iterable[float | None], missing: float = np.nan) -> np.ndarray:
        return np.array([missing if value is None else value for value in values], dtype=float)

    return LightCurve(
        mjd=column(point.mjd for point in taken),
        band=np.array([point.band for point in taken], dtype=np.str_),
        mag=column(point.mag for point in taken),
        err=column(point.err for point in taken),
        err_night=column((point.err_night for point in taken), 0.0),
        err_band=column(point.err_band for point in taken),
        flux=column(point.flux for point in taken),
        flux_err=column(point.flux_err for point in taken),
        night=np.array([point.zp_group or point.night for point in taken], dtype=np.str_),
        source=np.array([point.source for point in taken], dtype=np.str_),
        by_colour_terms=np.array([not point.passbands_known for point in taken], dtype=bool),
        bjd_tdb=column(point.bjd_tdb for point in taken),
    )
