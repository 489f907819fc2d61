"""The stamp of a target on its galaxy: where the galaxy is, and stars put on it for trial."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from reduce.measure.aperture import INSIDE_HOST_ARCSEC
from reduce.measure.forced import Difference, ForcedFlux
from reduce.measure.host import NO_PSF, NO_STAMP, HostFree
from reduce.measure.psf import Psf, stamp_psf
from reduce.measure.resample import sampling
from reduce.measure.scene import Cut, Scene, scene_of
from reduce.measure.sky import annulus_sky
from reduce.measure.stamps import StampPack
from reduce.records import Floats

DISC_FWHM = 2.2
"""About the target, its mirrored place and other stars: where nothing is learnt of the galaxy."""
ANGLES = 24
"""Position angles at which the isophote is followed."""
RADII = (0.5, 2.0)
"""Distances from the centre, in units of the target's, between which it is sought."""
WEIGHT_FWHM = 1.5
"""Radius of the weighted sums at the trial places."""


class HostStamp:
    """One frame's target stamp with the places on it, in the stamp's own pixels."""

    def __init__(self, scene: Scene, psf: Psf, row: Any, host_ra: float, host_dec: float, stars: Floats) -> None:
        self.scene, self.psf, self.row = scene, psf, row
        self.cut: Cut = scene.target
        self.fwhm = scene.fwhm_px
        self.x, self.y = float(row["x_px"]) - self.cut.x0, float(row["y_px"]) - self.cut.y0
        east = ((host_ra - self.cut.ra_deg + 180.0) % 360.0 - 180.0) * math.cos(math.radians(self.cut.dec_deg))
        offset = np.linalg.solve(np.array(scene.cd_deg), np.array([east, host_dec - self.cut.dec_deg]))
        self.hx, self.hy = self.x + float(offset[0]), self.y + float(offset[1])
        self.stars = stars
        """(m, 2) other stars on the stamp."""
        ny, nx = self.cut.good.shape
        self.gx, self.gy = np.meshgrid(np.arange(nx, dtype=float), np.arange(ny, dtype=float))
        self.shape = psf.at(float(row["x_px"]), float(row["y_px"]), self.cut.x0, self.cut.y0, (ny, nx))

    @property
    def distance(self) -> float:
        """Of the target from the galaxy's centre, pixels."""
        return math.hypot(self.x - self.hx, self.y - self.hy)

    def holds(self, x: float, y: float, margin_fwhm: float) -> bool:
        """Whether a disc about a place lies on the stamp."""
        ny, nx = self.cut.good.shape
        margin = margin_fwhm * self.fwhm
        return bool(margin <= x <= nx - 1 - margin and margin <= y <= ny - 1 - margin)

    def star_near(self, x: float, y: float) -> bool:
        """Whether another star lies within a disc of a place."""
        apart = np.hypot(self.stars[:, 0] - x, self.stars[:, 1] - y)
        return bool((apart < DISC_FWHM * self.fwhm).any())

    def turned(self) -> tuple[Floats, NDArray[np.bool_]]:
        """The stamp turned by 180 degrees about the centre, and where it holds light."""
        at = sampling((2 * self.hx - self.gx).ravel(), (2 * self.hy - self.gy).ravel(), self.cut.good.shape)
        bad = np.abs(at.read((~self.cut.good).astype(float))) > 0.2
        return at.read(self.cut.light_e).reshape(self.gx.shape), (at.inside & ~bad).reshape(self.gx.shape)

    def clear(self) -> NDArray[np.bool_]:
        """Pixels that neither the target nor its mirrored place nor another star reaches."""
        places = [(self.x, self.y), (2 * self.hx - self.x, 2 * self.hy - self.y)]
        places += [(float(x), float(y)) for x, y in self.stars]
        places += [(2 * self.hx - float(x), 2 * self.hy - float(y)) for x, y in self.stars]
        free = np.ones(self.gx.shape, bool)
        for x, y in places:
            free &= np.hypot(self.gx - x, self.gy - y) > DISC_FWHM * self.fwhm
        return free

    def places(self, level: float) -> list[tuple[float, float]]:
        """Places of one surface brightness, away from the target, its mirrored place and other stars."""
        from scipy.ndimage import gaussian_filter, map_coordinates

        smooth = gaussian_filter(self.cut.light_e, 0.4 * self.fwhm)
        radii = np.linspace(RADII[0] * self.distance, RADII[1] * self.distance, 61)
        start = math.atan2(self.y - self.hy, self.x - self.hx)
        found: list[tuple[float, float]] = []
        taken = [(self.x, self.y), (2 * self.hx - self.x, 2 * self.hy - self.y)]
        for angle in start + 2.0 * math.pi * np.arange(1, ANGLES) / ANGLES:
            x, y = self.hx + radii * math.cos(angle), self.hy + radii * math.sin(angle)
            light = map_coordinates(smooth, [y, x], order=1, mode="constant", cval=math.nan)
            crossing = np.flatnonzero((light[:-1] - level) * (light[1:] - level) <= 0)
            if not len(crossing):
                continue
            k = int(crossing[np.argmin(np.abs(radii[crossing] - self.distance))])
            px, py = float(x[k]), float(y[k])
            apart = [math.hypot(px - a, py - b) for a, b in taken]
            near = [math.hypot(px - a, py - b) for a, b in found]
            if min(apart) < DISC_FWHM * self.fwhm or min(near, default=math.inf) < self.fwhm:
                continue
            if self.holds(px, py, WEIGHT_FWHM) and not self.star_near(px, py):
                found.append((px, py))
        return found

    def weights(self, x: float, y: float, good: NDArray[np.bool_], noise: Floats) -> Floats | None:
        """(ny, nx) weights of a star at a place, adding up to 1 over its profile."""
        profile = self.psf.at(x + self.cut.x0, y + self.cut.y0, self.cut.x0, self.cut.y0, self.gx.shape)
        use = good & (np.hypot(self.gx - x, self.gy - y) < WEIGHT_FWHM * self.fwhm)
        weight = np.where(use, profile / noise, 0.0)
        total = float((weight * profile).sum())
        return weight / total if total > 0 and profile[use].sum() > 0.5 else None


def host_stamp(pack: StampPack, row: Any, host_ra: float, host_dec: float, psf: Psf | None) -> HostStamp | str:
    """The target's stamp of a frame, or a sentence on what is missing."""
    scene = scene_of(pack, str(row["target"]))
    if scene is None:
        return NO_STAMP
    psf = psf if psf is not None else stamp_psf(pack)
    if psf is None:
        return NO_PSF
    stars = np.array([[s.x_px - scene.target.x0, s.y_px - scene.target.y0] for s in scene.stars]).reshape(-1, 2)
    field = HostStamp(scene, psf, row, host_ra, host_dec, stars)
    if not field.holds(field.hx, field.hy, 1.0):
        return "The centre of the host lies outside the target's stamp."
    return field


@dataclass(frozen=True, slots=True)
class Trial:
    """A star above the sky of a bent annulus."""

    miss_e: float
    """Measured less put in."""
    err_e: float
    sky_e_px: float
    sky_err_e_px: float
    area_px: float
    """Flux per electron that the sky is off."""


def trials(field: HostStamp, places: list[tuple[float, float]], star_e: float, bare: Floats) -> list[Trial]:
    """Put stars at places of a stamp without the target and measure them as the target is measured."""
    cut, found = field.cut, []
    inside = field.distance * field.scene.scale_arcsec < INSIDE_HOST_ARCSEC
    others = np.vstack([field.stars, [[field.x, field.y]]])
    for x, y in places:
        profile = field.psf.at(x + cut.x0, y + cut.y0, cut.x0, cut.y0, field.gx.shape)
        light = (bare + star_e * profile).astype(np.float32)
        sky = annulus_sky(light, cut.good, others, np.array([x]), np.array([y]), field.fwhm,
                          host="inside" if inside else "outskirts")  # fmt: skip
        weight = field.weights(x, y, cut.good, cut.variance_e2)
        if weight is None or not math.isfinite(float(sky.level_e_px[0])):
            continue
        level, level_err, area = float(sky.level_e_px[0]), float(sky.err_e_px[0]), float(weight.sum())
        flux = float((weight * (light - level)).sum())
        variance = float((weight**2 * cut.variance_e2).sum()) + (area * level_err) ** 2
        found.append(Trial(flux - star_e, math.sqrt(variance), level, level_err, area))
    return found


def few(n: float) -> float:
    """How much wider the next draw scatters than the variance of n draws says (Student's t in place of a Gaussian)."""
    return (n + 1.0) / max(n - 1.0, 1.0)


def plain_difference(
    field: HostStamp,
    light: Floats,
    good: NDArray[np.bool_],
    host: Floats,
    noise: Floats,
    terms: Floats,
    covariance: Floats,
) -> Difference:
    """A difference in which the frame itself was not convolved and no noise is shared with other nights."""
    return Difference(
        light=light, good=good, shape=field.shape, frame_shape=field.shape, fwhm_px=field.fwhm,
        dx=field.gx[0] - field.x, dy=field.gy[:, 0] - field.y, host=host, base_e2=noise, base_shape=field.shape,
        terms=terms, star_terms=np.zeros_like(terms), covariance=covariance, scatter_err=0.0, kernel=np.ones((1, 1)),
        convolved_frame=False, frame_fwhm_px=field.fwhm, sky_err_e_px=0.0, other_variance=lambda weights: 0.0,
        other_e2=0.0,
    )  # fmt: skip


def write_flux(row: Any, flux: ForcedFlux) -> None:
    """Put a weighted sum into a STAR_DTYPE row."""
    row["psf_flux_e"], row["psf_flux_err_e"] = flux.flux_e, flux.err_e
    row["psf_chi2"], row["psf_rejected"], row["psf_flags"] = flux.chi2, min(flux.n_rejected, 65535), flux.flags


def without_reference(
    row: Any, method: Literal["mirrored", "bent annulus"], common: float, flux: ForcedFlux
) -> HostFree:
    """Result of a way that needs the frame alone."""
    return HostFree(
        row=row, method=method, common_err_e=common, kernel_sum=1.0, scale_err=0.0, chi2=math.nan, n_stars=0,
        convolved="", host_e=flux.host_e,
    )  # fmt: skip
