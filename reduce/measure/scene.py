"""The stamps of one frame made ready for differences: light above the sky, whole noise, and where to trust it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.measure.resample import Affine
from reduce.measure.stamps import Stamp, StampPack
from reduce.records import Floats, PixelFlag

MATCH_FWHM = 0.7
"""Stars of two frames are one when they lie nearer than this."""
LEAST_SNR = 20.0
"""Of a star that says where and how bright the other frame is."""
AFFINE_STARS = 6
"""With fewer, only a shift is taken from the stars; scale and rotation are those of the plate solution."""
CENTROID_FLOOR_PX = 0.02
"""No centroid is better than this from frame to frame (common practice)."""
APERTURE_FWHM = 2.0
FEW_STARS = 4
"""Fewer stars in common tell no more of the blur than its width."""
CLEAR_FWHM = 5.5
"""From here on the pixels by which a star tells the blur are free of the target's light."""
PLANE_STARS = 8
"""With fewer, the sky is taken as level over the field."""
SKY_CLIP, SKY_ROUNDS = 3.0, 20


@dataclass(frozen=True, slots=True)
class Cut:
    """One stamp; pixel (0, 0) of the arrays is pixel (x0, y0) of the frame."""

    x0: int
    y0: int
    x_px: float
    y_px: float
    ra_deg: float
    dec_deg: float
    light_e: Floats
    """(ny, nx) electrons above the sky; a pixel that cannot be trusted holds the mean of its neighbours."""
    variance_e2: Floats
    """(ny, nx) of everything, photons included."""
    good: NDArray[np.bool_]

    def distance(self) -> Floats:
        """(ny, nx) of each pixel from the star, pixels."""
        ny, nx = self.good.shape
        y, x = np.arange(ny)[:, None] + self.y0 - self.y_px, np.arange(nx)[None, :] + self.x0 - self.x_px
        return np.asarray(np.hypot(x, y), np.float64)


@dataclass(frozen=True, slots=True)
class Scene:
    """The target and the stars of one frame, or of a stack of frames on the pixels of one."""

    fwhm_px: float
    cd_deg: tuple[tuple[float, float], tuple[float, float]]
    target: Cut
    stars: tuple[Cut, ...]
    sky_e_px: float
    """Sky away from any galaxy: what was taken off the target's stamp."""
    sky_err_e_px: float
    """How far the sky at a star may be off: the annuli's scatter about the plane through all of them."""
    readout_e2: float
    """Middle variance of a pixel without any light."""

    def off_target(self, star: Cut) -> float:
        """Pixels from the target to a star."""
        return math.hypot(star.x_px - self.target.x_px, star.y_px - self.target.y_px)

    def on_target(self, star: Cut) -> bool:
        """Whether a star lies on the target's stamp."""
        ny, nx = self.target.good.shape
        return bool(0 <= star.x_px - self.target.x0 < nx and 0 <= star.y_px - self.target.y0 < ny)

    @property
    def scale_arcsec(self) -> float:
        """Of one pixel."""
        (a, b), (c, d) = self.cd_deg
        return math.sqrt(abs(a * d - b * c)) * 3600.0


def scene_of(pack: StampPack, target: str) -> Scene | None:
    """Stamps of one frame, None where the target has none."""
    mine = [stamp for stamp in pack.stamps if stamp.target == target]
    stars = [stamp for stamp in pack.stamps if not stamp.target and math.isfinite(stamp.sky_e_px)]
    if not mine:
        return None
    levels, sky, sky_err = _sky_of(stars, mine[0])
    if not math.isfinite(sky):
        return None
    readout = float(np.nanmedian(mine[0].variance_e2))
    cuts = tuple(_cut(stamp, float(level)) for stamp, level in zip(stars, levels, strict=True))
    return Scene(
        pack.fwhm_px, pack.cd_deg, target=_cut(mine[0], sky), stars=cuts, sky_e_px=sky, sky_err_e_px=sky_err,
        readout_e2=readout,
    )  # fmt: skip


def _sky_of(stars: list[Stamp], target: Stamp) -> tuple[Floats, float, float]:
    """Sky at each star and at the target from a plane through all annuli, and their scatter about it.

    A bright star's own annulus holds light of its wings, by which two frames of unlike seeing differ.
    """
    if not stars:
        return np.zeros(0), target.sky_e_px, 0.0
    sky = np.array([stamp.sky_e_px for stamp in stars])
    offset = np.array([[stamp.x_px - target.x_px, stamp.y_px - target.y_px] for stamp in stars])
    design = np.column_stack([np.ones(len(sky)), offset / max(float(np.abs(offset).max()), 1.0)])
    if len(sky) < PLANE_STARS:
        design = design[:, :1]
    solved = np.zeros(design.shape[1])
    solved[0] = np.median(sky)
    for _ in range(SKY_ROUNDS):
        # Least absolute deviations: a fifth of the annuli may be off.
        off = np.abs(sky - design @ solved)
        weight = np.maximum(off, max(0.1 * float(np.median(off)), 1e-9)) ** -0.5
        solved = np.linalg.lstsq(design * weight[:, None], sky * weight, rcond=None)[0]
    off = sky - design @ solved
    scatter = 1.4826 * float(np.median(np.abs(off)))
    keep = np.abs(off) <= SKY_CLIP * scatter
    if keep.sum() > design.shape[1] + 2:
        solved = np.linalg.lstsq(design[keep], sky[keep], rcond=None)[0]
        scatter = 1.4826 * float(np.median(np.abs(sky - design @ solved)[keep]))
    return np.asarray(design @ solved), float(solved[0]), scatter


def _cut(stamp: Stamp, sky_e_px: float) -> Cut:
    data = stamp.data_e.astype(float)
    good = (stamp.mask & (PixelFlag.SATURATED | PixelFlag.BAD | PixelFlag.NOT_FINITE)) == 0
    good &= np.isfinite(data) & np.isfinite(stamp.variance_e2)
    light = filled(np.where(good, data - sky_e_px, 0.0), good)
    from scipy import ndimage

    # The middle of nine pixels: the pixel's own photons must not decide its own weight.
    photons = np.maximum(ndimage.uniform_filter(light, 3, mode="nearest") + sky_e_px, 0.0)
    variance = np.where(good, stamp.variance_e2, np.nanmedian(stamp.variance_e2)).astype(float) + photons
    return Cut(stamp.x0, stamp.y0, stamp.x_px, stamp.y_px, stamp.ra_deg, stamp.dec_deg, light, variance, good)


def filled(values: Floats, good: NDArray[np.bool_]) -> Floats:
    """``values`` with the mean of the good pixels around in place of the others."""
    if good.all():
        return values
    from scipy import ndimage

    weight = ndimage.gaussian_filter(good.astype(float), 1.0, mode="constant")
    around = ndimage.gaussian_filter(np.where(good, values, 0.0), 1.0, mode="constant")
    return np.where(good, values, np.where(weight > 1e-3, around / np.maximum(weight, 1e-3), 0.0))


@dataclass(frozen=True, slots=True)
class Pairing:
    """How one scene lies on another."""

    affine: Affine
    """Pixels of the first to pixels of the second."""
    pairs: tuple[tuple[int, int], ...]
    """Stars of both, brightest of the first scene's order first."""
    flux_ratio: float
    """Light of the second over that of the first, from the stars; NaN without any."""


def pair(first: Scene, second: Scene) -> Pairing:
    """Find the stars that both hold and, from them, the affine map between their pixels.

    On the target's stamp, parts of its galaxy pass for stars, and the target's own light lies on them: they are only
    taken, well off the target, where there are too few others.
    """
    usable = [(_clean(a, first.fwhm_px), _star_flux(a, first.fwhm_px)) for a in first.stars]
    theirs = [(_clean(b, second.fwhm_px), _star_flux(b, second.fwhm_px)) for b in second.stars]
    found = [
        (i, j) for i, j in _matches(first, second)
        if usable[i][0] and theirs[j][0] and min(usable[i][1][1], theirs[j][1][1]) > LEAST_SNR
    ]  # fmt: skip
    away = [(i, j) for i, j in found if not (first.on_target(first.stars[i]) or second.on_target(second.stars[j]))]
    clear = CLEAR_FWHM * max(first.fwhm_px, second.fwhm_px * second.scale_arcsec / first.scale_arcsec)
    pairs = tuple(away if len(away) >= FEW_STARS else [p for p in found if first.off_target(first.stars[p[0]]) > clear])
    matrix = np.linalg.inv(np.array(second.cd_deg)) @ np.array(first.cd_deg)
    p = np.array([[first.stars[i].x_px, first.stars[i].y_px] for i, _ in pairs]).reshape(-1, 2)
    q = np.array([[second.stars[j].x_px, second.stars[j].y_px] for _, j in pairs]).reshape(-1, 2)
    snr = np.array([min(usable[i][1][1], theirs[j][1][1]) for i, j in pairs])
    width = max(first.fwhm_px * abs(np.linalg.det(matrix)) ** 0.5, second.fwhm_px)
    error = np.hypot(0.6 * width / np.maximum(snr, 1.0), CENTROID_FLOOR_PX)
    ratios = np.array([theirs[j][1][0] / usable[i][1][0] for i, j in pairs])
    return Pairing(_affine(first, second, matrix, p, q, error), pairs, float(np.median(ratios)) if pairs else math.nan)


def _matches(first: Scene, second: Scene) -> list[tuple[int, int]]:
    if not first.stars or not second.stars:
        return []
    a = np.array([[s.ra_deg, s.dec_deg] for s in first.stars])
    b = np.array([[s.ra_deg, s.dec_deg] for s in second.stars])
    narrow = np.cos(np.radians(first.target.dec_deg))
    east = (a[:, None, 0] - b[None, :, 0] + 180.0) % 360.0 - 180.0
    apart = np.hypot(east * narrow, a[:, None, 1] - b[None, :, 1]) * 3600.0
    apart = np.where(np.isfinite(apart), apart, np.inf)
    reach = MATCH_FWHM * max(first.fwhm_px * first.scale_arcsec, second.fwhm_px * second.scale_arcsec)
    there, back = apart.argmin(axis=1), apart.argmin(axis=0)
    return [(i, int(j)) for i, j in enumerate(there) if back[j] == i and apart[i, j] < reach]


def _clean(cut: Cut, fwhm_px: float) -> bool:
    near = cut.distance() < fwhm_px
    return bool(near.sum() > 2.0 * fwhm_px**2 and cut.good[near].all())


def _star_flux(cut: Cut, fwhm_px: float) -> tuple[float, float]:
    near = (cut.distance() < APERTURE_FWHM * fwhm_px) & cut.good
    flux = float(cut.light_e[near].sum())
    noise = float(np.sqrt(cut.variance_e2[near].sum()))
    return flux, flux / noise if noise > 0 else 0.0


def _affine(first: Scene, second: Scene, matrix: NDArray[np.float64], p: Floats, q: Floats, error: Floats) -> Affine:
    """Weighted affine fit; what lies more than 4 σ away is left out."""
    centre = np.array([first.target.x_px, first.target.y_px])
    start = np.array([second.target.x_px, second.target.y_px])
    offset = p - centre
    keep = np.ones(len(p), bool)
    shift = start
    for _ in range(5):
        if not keep.any():
            break
        weight = np.where(keep, 1.0 / error, 0.0)[:, None]
        if keep.sum() >= AFFINE_STARS:
            design = np.column_stack([np.ones(len(p)), offset])
            solved = np.linalg.lstsq(design * weight, q * weight, rcond=None)[0]
            shift, matrix = solved[0], solved[1:].T
        else:
            shift = ((q - offset @ matrix.T) * weight**2).sum(axis=0) / (weight**2).sum()
        miss = np.hypot(*(q - shift - offset @ matrix.T).T)
        now = miss < 4.0 * np.maximum(error, 1.4826 * np.median(miss[keep]) / 1.18)
        if np.array_equal(now, keep) or not now.any():
            break
        keep = now
    rows = ((float(matrix[0, 0]), float(matrix[0, 1])), (float(matrix[1, 0]), float(matrix[1, 1])))
    return Affine(rows, (float(centre[0]), float(centre[1])), (float(shift[0]), float(shift[1])))
