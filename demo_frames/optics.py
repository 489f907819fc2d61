"""From the sky to pixels: gnomonic projection, star images, the host galaxy."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from demo_frames.scenario import GalaxyScene
from reduce.records import Floats

MOFFAT_BETA = 3.5
FWHM_OF_CORE = 2.0 * (2.0 ** (1.0 / MOFFAT_BETA) - 1.0) ** 0.5
"""FWHM of a Moffat profile in units of its core radius."""
STAMP_FWHM = 9.0
"""Half-width of a star's stamp; what lies beyond is under 0.1 mmag."""
NODES, WEIGHTS = np.polynomial.legendre.leggauss(4)
NODES, WEIGHTS = NODES / 2.0, WEIGHTS / 2.0


@dataclass(frozen=True, slots=True)
class Pointing:
    """Where the optical axis points, and how the camera is turned; not mirrored."""

    ra_deg: float
    dec_deg: float
    rotation_deg: float
    """Position angle of +y, north through east."""
    scale_arcsec: float
    x_px: float
    y_px: float
    """0-based pixel of the axis."""

    @property
    def cd_deg(self) -> Floats:
        """(2, 2) degrees east and north per pixel in x and y."""
        sine, cosine = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        return self.scale_arcsec / 3600.0 * np.array([[-cosine, sine], [sine, cosine]])

    def to_pixels(self, ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats]:
        """Gnomonic projection (Calabretta & Greisen 2002), then scale and rotation."""
        d_ra, dec = np.radians(ra_deg - self.ra_deg), np.radians(dec_deg)
        dec0 = np.radians(self.dec_deg)
        depth = np.sin(dec) * np.sin(dec0) + np.cos(dec) * np.cos(dec0) * np.cos(d_ra)
        xi = np.cos(dec) * np.sin(d_ra) / depth
        eta = (np.sin(dec) * np.cos(dec0) - np.cos(dec) * np.sin(dec0) * np.cos(d_ra)) / depth
        x, y = np.linalg.solve(self.cd_deg, np.degrees(np.vstack([xi, eta])))
        return x + self.x_px, y + self.y_px


def add_star(image: Floats, x: float, y: float, flux_e: float, fwhm_px: float) -> None:
    """Add a Moffat star (beta 3.5) of ``flux_e`` in all, integrated over each pixel by 4 × 4 Gauss points."""
    reach = int(np.ceil(STAMP_FWHM * fwhm_px))
    x0, x1 = max(round(x) - reach, 0), min(round(x) + reach + 1, image.shape[1])
    y0, y1 = max(round(y) - reach, 0), min(round(y) + reach + 1, image.shape[0])
    if x0 >= x1 or y0 >= y1:
        return
    core = fwhm_px / FWHM_OF_CORE
    dx2 = ((np.arange(x0, x1)[:, None] + NODES - x) / core) ** 2
    dy2 = ((np.arange(y0, y1)[:, None] + NODES - y) / core) ** 2
    stamp = np.zeros((y1 - y0, x1 - x0))
    for j, weight_y in enumerate(WEIGHTS):
        for i, weight_x in enumerate(WEIGHTS):
            u = 1.0 + dy2[:, j][:, None] + dx2[:, i][None, :]
            stamp += weight_x * weight_y / (u * u * u * np.sqrt(u))
    image[y0:y1, x0:x1] += flux_e * (MOFFAT_BETA - 1.0) / (np.pi * core**2) * stamp


def add_streak(image: Floats, x: float, y: float, angle_deg: float, peak_e: float, fwhm_px: float) -> None:
    """Add a satellite's streak through (x, y), as wide as a star's image; the angle runs from +x towards +y."""
    yy, xx = np.indices(image.shape, dtype=float)
    angle = np.radians(angle_deg)
    off = (yy - y) * np.cos(angle) - (xx - x) * np.sin(angle)
    image += peak_e * np.exp(-4.0 * np.log(2.0) * (off / fwhm_px) ** 2)


def add_galaxy(
    image: Floats, x: float, y: float, flux_e: float, scene: GalaxyScene, pointing: Pointing, fwhm_px: float
) -> None:
    """Add an exponential disc of ``flux_e`` in all, its cusp blunted by the seeing."""
    yy, xx = np.indices(image.shape, dtype=float)
    offset = np.stack([xx - x, yy - y])
    east, north = np.tensordot(pointing.cd_deg * 3600.0, offset, axes=1)
    angle = np.radians(scene.position_angle_deg)
    along = east * np.sin(angle) + north * np.cos(angle)
    across = (east * np.cos(angle) - north * np.sin(angle)) / scene.axis_ratio
    blunt = 0.5 * fwhm_px * pointing.scale_arcsec
    radius = np.sqrt(along**2 + across**2 + blunt**2) / scene.scale_length_arcsec
    total = 2.0 * np.pi * scene.scale_length_arcsec**2 * scene.axis_ratio / pointing.scale_arcsec**2
    image += flux_e / total * np.exp(-radius)
