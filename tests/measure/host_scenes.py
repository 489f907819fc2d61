"""Frames of a supernova on a galaxy, drawn by GalSim with a known supernova, reference and photon limit."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property, lru_cache

import galsim
import numpy as np
from star_images import calibrated

from reduce.measure.aperture import measure_stars
from reduce.measure.stamps import StampPack, pack, unpack
from reduce.records import FieldSolution
from reduce.stars.centroid import centroid

TARGET = "Example SN"
RA, DEC = 150.0, 20.0
READ_NOISE_E = 8.0


@dataclass(frozen=True)
class Galaxy:
    """A bulge and an inclined disc about a place east and north of the supernova, arcsec."""

    east: float = 3.0
    north: float = 4.0
    bulge_e: float = 3.0e4
    bulge_arcsec: float = 1.5
    disc_e: float = 1.5e5
    disc_arcsec: float = 8.0
    axis_ratio: float = 0.6
    angle_deg: float = 30.0
    knots: int = 0
    """Star-forming regions in the disc, with a twentieth of its light: no galaxy is symmetric."""
    seed: int = 0

    def profile(self) -> galsim.GSObject:
        shear = galsim.Shear(q=self.axis_ratio, beta=self.angle_deg * galsim.degrees)
        disc = galsim.Exponential(half_light_radius=self.disc_arcsec, flux=self.disc_e).shear(shear)
        whole = disc + galsim.Sersic(n=2.0, half_light_radius=self.bulge_arcsec, flux=self.bulge_e, trunc=40.0)
        rng = np.random.default_rng(self.seed)
        for _ in range(self.knots):
            radius, angle = rng.gamma(2.0, self.disc_arcsec / 1.68), rng.uniform(0.0, 2.0 * np.pi)
            place = shear.getMatrix() @ (radius * np.cos(angle), radius * np.sin(angle))
            light = self.disc_e * 0.05 * rng.exponential() / self.knots
            whole += galsim.Gaussian(half_light_radius=rng.uniform(0.5, 1.5), flux=light).shift(*place)
        return whole

    @property
    def light_e(self) -> float:
        return float(self.profile().flux)


@dataclass(frozen=True, eq=False)
class Sky:
    """Stars (arcsec from the supernova) and the galaxy: what all frames share."""

    east: np.ndarray
    north: np.ndarray
    flux_e: np.ndarray
    galaxy: Galaxy = field(default_factory=Galaxy)


def field_of(seed: int, n: int = 30, half_arcsec: float = 220.0, galaxy: Galaxy | None = None) -> Sky:
    rng = np.random.default_rng(seed)
    east, north = [], []
    while len(east) < n:
        e, s = rng.uniform(-half_arcsec, half_arcsec, 2)
        if np.hypot(e, s) > 45 and all(np.hypot(e - a, s - b) > 30 for a, b in zip(east, north, strict=True)):
            east.append(e)
            north.append(s)
    return Sky(np.array(east), np.array(north), 10 ** rng.uniform(3.8, 5.5, n), galaxy or Galaxy())


@dataclass(frozen=True)
class Frame:
    """How one frame was taken."""

    seeing_arcsec: float = 2.0
    scale_arcsec: float = 1.0
    side: int = 512
    rotation_deg: float = 0.0
    mirrored: bool = False
    shift_px: tuple[float, float] = (0.0, 0.0)
    depth: float = 1.0
    """Light and sky in units of an ordinary exposure."""
    sky_e_arcsec2: float = 400.0
    supernova_e: float = 2.0e4
    beta: float = 3.0
    shear: tuple[float, float] = (0.0, 0.0)


def _geometry(frame: Frame) -> tuple[np.ndarray, np.ndarray]:
    """Arcsec per pixel (east, north) and where the supernova lies; east to the left unless mirrored."""
    s, turn = frame.scale_arcsec, np.radians(frame.rotation_deg)
    rotation = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    middle = (frame.side - 1) / 2.0
    return rotation @ np.diag([s if frame.mirrored else -s, s]), np.array(
        [middle + 0.31, middle - 0.17]
    ) + frame.shift_px


@lru_cache(maxsize=64)
def _drawn(sky: Sky, frame: Frame) -> tuple[np.ndarray, np.ndarray]:
    """(side, side) expected electrons, and the light of a unit star at the supernova's place."""
    cd, centre = _geometry(frame)
    inverse = np.linalg.inv(cd)
    psf = galsim.Moffat(beta=frame.beta, fwhm=frame.seeing_arcsec).shear(g1=frame.shear[0], g2=frame.shear[1])
    # The sky's (east, north) plane goes through the inverse matrix into pixels; the seeing is given in pixels' axes.
    galaxy = sky.galaxy.profile().transform(*(inverse * frame.scale_arcsec).ravel())
    galaxy = galaxy.withFlux(sky.galaxy.light_e * frame.depth)
    host_xy = inverse @ np.array([sky.galaxy.east, sky.galaxy.north]) + centre
    whole, unit = (galsim.ImageD(frame.side, frame.side, init_value=0.0) for _ in range(2))
    _add(whole, galsim.Convolve(galaxy, psf), *host_xy, 181, frame.scale_arcsec)
    for (x, y), flux in zip((inverse @ np.stack([sky.east, sky.north])).T + centre, sky.flux_e, strict=True):
        _add(whole, psf.withFlux(flux * frame.depth), x, y, 61, frame.scale_arcsec)
    _add(unit, psf, *centre, 161, frame.scale_arcsec)
    light = whole.array + frame.depth * (frame.supernova_e * unit.array + frame.sky_e_arcsec2 * frame.scale_arcsec**2)
    return light, unit.array.copy()


def _add(whole: galsim.ImageD, profile: galsim.GSObject, x: float, y: float, size: int, scale: float) -> None:
    half = size // 2
    cut = galsim.ImageD(galsim.BoundsI(round(x) + 1 - half, round(x) + 1 + half,
                                       round(y) + 1 - half, round(y) + 1 + half))  # fmt: skip
    profile.drawImage(cut, scale=scale, center=galsim.PositionD(x + 1.0, y + 1.0))
    common = cut.bounds & whole.bounds
    if common.isDefined():
        whole[common] += cut[common]


class Rendered:
    """One frame without and with noise, and what is true of it."""

    def __init__(self, sky: Sky, frame: Frame, seed: int, cosmic_ray_e: float = 0.0) -> None:
        self.sky, self.frame = sky, frame
        self.cd_arcsec, self.centre = _geometry(frame)
        self.stars_xy = (np.linalg.inv(self.cd_arcsec) @ np.stack([sky.east, sky.north])).T + self.centre
        self.mean, self.unit = _drawn(sky, frame)
        rng = np.random.default_rng(seed)
        data = rng.poisson(self.mean) + rng.normal(0.0, READ_NOISE_E, self.mean.shape)
        if cosmic_ray_e:
            x, y = np.rint(self.centre).astype(int)
            data[y, x] += cosmic_ray_e
            data[y, x + 1] += 0.6 * cosmic_ray_e
        self.image = calibrated(data, READ_NOISE_E)

    @property
    def fwhm_px(self) -> float:
        """Of the pixels' image, as a star detection would give it."""
        return float(np.hypot(self.frame.seeing_arcsec / self.frame.scale_arcsec, 0.6))

    @property
    def supernova_e(self) -> float:
        return self.frame.supernova_e * self.frame.depth

    @cached_property
    def table(self) -> np.ndarray:
        xy = self.stars_xy
        x, y, _, _ = centroid(self.image.data_e, xy[:, 0], xy[:, 1], self.fwhm_px)
        x, y = np.append(x, self.centre[0]), np.append(y, self.centre[1])
        table = measure_stars(self.image, x, y, self.fwhm_px, self.frame.scale_arcsec, np.column_stack([x, y]),
                              host_arcsec=np.append(np.full(len(xy), np.nan), 5.0))  # fmt: skip
        offset = self.cd_arcsec @ np.stack([x - self.centre[0], y - self.centre[1]]) / 3600.0
        table["ra_deg"], table["dec_deg"] = RA + offset[0] / np.cos(np.radians(DEC)), DEC + offset[1]
        table["role"][-1], table["target"][-1] = 1, TARGET
        return table

    @property
    def row(self) -> np.ndarray:
        return self.table[-1]

    @cached_property
    def pack(self) -> StampPack:
        cd = tuple(tuple(float(v) for v in line) for line in self.cd_arcsec / 3600.0)
        solution = FieldSolution((RA, DEC), tuple(self.centre), cd, 30, 0.05)  # type: ignore[arg-type]
        return unpack(pack(self.image, self.table, self.fwhm_px, solution))

    @property
    def host_sky(self) -> tuple[float, float]:
        g = self.sky.galaxy
        return RA + g.east / 3600.0 / np.cos(np.radians(DEC)), DEC + g.north / 3600.0

    @property
    def photon_limit_e(self) -> float:
        """Fisher limit of the flux with profile, host and sky known."""
        return float((self.unit**2 / (self.mean + READ_NOISE_E**2)).sum() ** -0.5)

    @property
    def luck_e(self) -> float:
        """What the noise drawn for this frame adds to the flux of the best measurement there can be."""
        weight = self.unit / (self.mean + READ_NOISE_E**2)
        clean = self.image.mask == 0
        return float((weight * (self.image.data_e - self.mean))[clean].sum() / (weight * self.unit)[clean].sum())

    def enclosed(self) -> float:
        """Light of a star within 4 FWHM: what a measured flux of 1 means."""
        y, x = np.mgrid[0 : self.frame.side, 0 : self.frame.side]
        inside = np.hypot(x - self.centre[0], y - self.centre[1]) < 4.0 * self.fwhm_px
        return float(self.unit[inside].sum())
