"""Gnomonic (TAN) projection and plate solutions (Calabretta & Greisen 2002, A&A 395, 1077)."""

from __future__ import annotations

import numpy as np

from reduce.records import FieldSolution, Floats

ROUNDS = 5
"""Re-projections about the moved tangent point; the last one moves it by less than 1e-10 degrees."""


def project(ra_deg: Floats, dec_deg: Floats, ra0_deg: float, dec0_deg: float) -> tuple[Floats, Floats]:
    """Standard coordinates (xi, eta) in degrees about a tangent point; NaN beyond 90 degrees from it."""
    ra, dec = np.radians(np.asarray(ra_deg) - ra0_deg), np.radians(dec_deg)
    sin0, cos0 = np.sin(np.radians(dec0_deg)), np.cos(np.radians(dec0_deg))
    below = sin0 * np.sin(dec) + cos0 * np.cos(dec) * np.cos(ra)
    below = np.where(below > 1e-9, below, np.nan)
    xi = np.cos(dec) * np.sin(ra) / below
    eta = (cos0 * np.sin(dec) - sin0 * np.cos(dec) * np.cos(ra)) / below
    return np.degrees(xi), np.degrees(eta)


def deproject(xi_deg: Floats, eta_deg: Floats, ra0_deg: float, dec0_deg: float) -> tuple[Floats, Floats]:
    """ICRS degrees of standard coordinates; right ascension in [0, 360)."""
    xi, eta = np.radians(xi_deg), np.radians(eta_deg)
    sin0, cos0 = np.sin(np.radians(dec0_deg)), np.cos(np.radians(dec0_deg))
    below = cos0 - eta * sin0
    ra = (ra0_deg + np.degrees(np.arctan2(xi, below))) % 360.0
    dec = np.degrees(np.arctan2(sin0 + eta * cos0, np.hypot(xi, below)))
    # The remainder of a tiny negative number rounds to 360 itself.
    return np.where(ra < 360.0, ra, 0.0), dec


def sky_to_pixel(solution: FieldSolution, ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats]:
    """0-based pixel coordinates of ICRS positions; NaN for the far side of the sky."""
    xi, eta = project(ra_deg, dec_deg, *solution.crval_deg)
    (a, b), (c, d) = solution.cd_deg
    determinant = a * d - b * c
    x = (d * xi - b * eta) / determinant + solution.crpix_px[0]
    y = (a * eta - c * xi) / determinant + solution.crpix_px[1]
    return x, y


def pixel_to_sky(solution: FieldSolution, x_px: Floats, y_px: Floats) -> tuple[Floats, Floats]:
    """ICRS degrees of 0-based pixel coordinates."""
    (a, b), (c, d) = solution.cd_deg
    dx, dy = np.asarray(x_px) - solution.crpix_px[0], np.asarray(y_px) - solution.crpix_px[1]
    return deproject(a * dx + b * dy, c * dx + d * dy, *solution.crval_deg)


def fit_solution(
    x_px: Floats, y_px: Floats, ra_deg: Floats, dec_deg: Floats, crpix_px: tuple[float, float]
) -> FieldSolution:
    """Least-squares plate solution of three or more star pairs.

    Parameters
    ----------
    x_px, y_px
        (n,) 0-based pixel coordinates.
    ra_deg, dec_deg
        (n,) ICRS.
    crpix_px
        Pixel that becomes the tangent point, usually the centre of the frame.

    Raises
    ------
    ValueError
        Fewer than three pairs, or all on one line.
    """
    if len(x_px) < 3:
        raise ValueError("a plate solution needs three stars")
    design = np.column_stack([np.ones(len(x_px)), x_px - crpix_px[0], y_px - crpix_px[1]])
    ra0, dec0 = _middle(ra_deg, dec_deg)
    for _ in range(ROUNDS):
        xi, eta = project(ra_deg, dec_deg, ra0, dec0)
        rows, _, rank, _ = np.linalg.lstsq(design, np.column_stack([xi, eta]), rcond=1e-10)
        if rank < 3:
            raise ValueError("the stars of a plate solution lie on one line")
        ra_new, dec_new = deproject(rows[0, 0], rows[0, 1], ra0, dec0)
        ra0, dec0 = float(ra_new), float(dec_new)
    xi, eta = project(ra_deg, dec_deg, ra0, dec0)
    rows = np.linalg.lstsq(design, np.column_stack([xi, eta]), rcond=None)[0]
    cd = ((float(rows[1, 0]), float(rows[2, 0])), (float(rows[1, 1]), float(rows[2, 1])))
    solution = FieldSolution((ra0, dec0), crpix_px, cd, len(x_px), 0.0)
    x, y = sky_to_pixel(solution, ra_deg, dec_deg)
    freedom = max(len(x_px) - 3, 1)
    rms = float(np.sqrt(np.sum((x - x_px) ** 2 + (y - y_px) ** 2) / (2 * freedom)))
    return FieldSolution((ra0, dec0), crpix_px, cd, len(x_px), rms)


def _middle(ra_deg: Floats, dec_deg: Floats) -> tuple[float, float]:
    """Mean direction."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    x, y, z = np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)
    return (
        float(np.degrees(np.arctan2(y.mean(), x.mean())) % 360.0),
        float(np.degrees(np.arctan2(z.mean(), np.hypot(x.mean(), y.mean())))),
    )


def to_header(solution: FieldSolution) -> dict[str, str | float]:
    """FITS cards of a solution; CRPIX counts from 1."""
    (a, b), (c, d) = solution.cd_deg
    return {
        "CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CUNIT1": "deg", "CUNIT2": "deg", "RADESYS": "ICRS",
        "CRVAL1": solution.crval_deg[0], "CRVAL2": solution.crval_deg[1],
        "CRPIX1": solution.crpix_px[0] + 1.0, "CRPIX2": solution.crpix_px[1] + 1.0,
        "CD1_1": a, "CD1_2": b, "CD2_1": c, "CD2_2": d,
    }  # fmt: skip
