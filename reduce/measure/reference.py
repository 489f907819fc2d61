"""A reference: the frames of one band without the supernova, stacked on the pixels of the sharpest."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from reduce.measure.resample import Affine, sampling
from reduce.measure.scene import Cut, Scene, filled, pair, scene_of
from reduce.measure.stamps import StampPack
from reduce.records import Floats

ENOUGH_WEIGHT = 0.9
"""A star that fewer of the frames hold has another blur than the target, and is left out."""
OUTLIER_SIGMA = 5.0
OUTLIER_SHARE = 0.4
"""Frames of unlike seeing differ by this fraction of the local light without any fault."""
LIGHT_DAYS = (-25.0, 400.0)
"""Days after a reference in which a type Ia supernova may not have begun, or before it, not yet faded."""


SAME_STAR_ARCSEC = 2.0
BAND_STARS, BAND_RANGE = 6, 0.4
"""Stars, and range of their colours in mag, that can tell one band system from another."""
BAND_FLOOR = 0.01
"""Magnitudes; scatter of a star's flux from place to place on the detector (common practice)."""
BAND_SLOPE, BAND_SIGMA = 0.03, 4.0
"""Mag per mag, and its significance, from which two systems are called different."""


@dataclass(frozen=True, slots=True)
class Reference:
    """One band of one target without its light."""

    scene: Scene
    n_frames: int
    notes: tuple[str, ...] = ()


def stack_reference(packs: Sequence[tuple[StampPack, float]], target: str) -> Reference | None:
    """Combine reference frames of one band; they may come from several cameras.

    Parameters
    ----------
    packs
        Stamp packs with the factor that brings each frame's electrons to a common scale (``10**(-0.4 (zp - 25))``
        over the exposure, or 1.0 where it is not known); stars in common refine it.
    target
        Name of the target whose stamp is wanted.

    Returns
    -------
    Reference or None
        None where no pack holds the target.
    """
    held = [(scene, factor) for pack, factor in packs if (scene := scene_of(pack, target)) is not None]
    if not held:
        return None
    # By seeing, then by depth; the order of the packs does not matter.
    held.sort(key=lambda one: (one[0].fwhm_px * one[0].scale_arcsec, one[0].sky_e_px * one[1] ** 2, one[1]))
    best, unit = held[0]
    others = [_Laid(best, scene, factor / unit) for scene, factor in held[1:]]
    notes = []
    if any(len(other.pairing.pairs) == 0 for other in others):
        notes.append("A reference frame shares no star with the sharpest one and was left out.")
    laid = [other for other in others if other.pairing.pairs]
    if not laid:
        return Reference(best, 1, tuple(notes))
    weights = np.array([_weight(best, 1.0, 1.0)] + [_weight(o.scene, o.factor, o.zoom) for o in laid])
    weights /= weights.sum()
    target_cut = _combine(best.target, [other.sample(best.target, other.scene.target) for other in laid], weights)
    stars = []
    for i, star in enumerate(best.stars):
        seen = [other.star(i) for other in laid]
        present = np.array([True] + [cut is not None for cut in seen])
        if weights[present].sum() < ENOUGH_WEIGHT:
            continue
        samples = [o.sample(star, cut) for o, cut in zip(laid, seen, strict=True) if cut is not None]
        stars.append(_combine(star, samples, weights[present] / weights[present].sum()))
    widths = np.array([best.fwhm_px] + [other.scene.fwhm_px * other.zoom for other in laid])
    sky_errs = np.array([best.sky_err_e_px] + [o.scene.sky_err_e_px * o.factor / o.zoom**2 for o in laid])
    scene = replace(
        best, target=target_cut, stars=tuple(stars), fwhm_px=float((weights * widths).sum()),
        sky_err_e_px=float(np.hypot.reduce(weights * sky_errs)),
    )  # fmt: skip
    return Reference(scene, 1 + len(laid), tuple(notes))


def supernova_light_note(frame_mjd: Sequence[float], reference_mjd: Sequence[float]) -> str:
    """A sentence where a reference was taken while the supernova may have shone, else ''.

    Parameters
    ----------
    frame_mjd
        Days on which the target was followed.
    reference_mjd
        Days of the reference frames.
    """
    if not len(frame_mjd) or not len(reference_mjd):
        return ""
    first, last = min(frame_mjd), max(frame_mjd)
    suspect = [mjd for mjd in reference_mjd if first + LIGHT_DAYS[0] < mjd < last + LIGHT_DAYS[1]]
    if not suspect:
        return ""
    one = min(suspect)
    side = "after" if one >= first else "before"
    when = f"{abs(one - first):.0f} days {side} the first frame"
    return (
        f"The reference of MJD {one:.1f} was taken {when}: it may hold light of the supernova itself, which the "
        "difference then lacks."
    )


def band_note(
    pairs: Sequence[tuple[float, float, float, float]], ra_deg: Floats, dec_deg: Floats, colour: Floats
) -> str:
    """A sentence where the stars' flux ratios run with their colour, as between two band systems; else ''.

    Parameters
    ----------
    pairs
        ``HostFree.colour_pairs`` of one frame or of many: right ascension, declination, ratio, its error.
    ra_deg, dec_deg, colour
        (n,) stars of the comparison sequence.
    """
    found = np.array(pairs, float).reshape(-1, 4)
    east = (found[:, None, 0] - ra_deg[None, :] + 180.0) % 360.0 - 180.0
    apart = np.hypot(east * np.cos(np.radians(dec_deg))[None, :], found[:, None, 1] - dec_deg[None, :]) * 3600.0
    if not apart.size:
        return ""
    star = apart.argmin(axis=1)
    good = (apart.min(axis=1) < SAME_STAR_ARCSEC) & np.isfinite(colour[star]) & (found[:, 2] > 0)
    if good.sum() < BAND_STARS or np.ptp(colour[star][good]) < BAND_RANGE:
        return ""
    x, y = colour[star][good], -2.5 * np.log10(found[good, 2])
    error = np.hypot(1.0857 * found[good, 3], BAND_FLOOR)
    x = x - np.average(x, weights=error**-2.0)
    square = float((x**2 / error**2).sum())
    slope, slope_err = float((x * y / error**2).sum()) / square, square**-0.5
    if abs(slope) < max(BAND_SLOPE, BAND_SIGMA * slope_err):
        return ""
    return (
        f"The reference sees the colours of stars otherwise than the frames ({slope:+.3f} ± {slope_err:.3f} mag per "
        f"mag of colour, {int(good.sum())} stars): a host of another colour than the stars is not taken off well."
    )


class _Laid:
    """One more frame laid over the best."""

    def __init__(self, best: Scene, scene: Scene, factor: float) -> None:
        self.scene = scene
        self.pairing = pair(best, scene)
        self.partner = dict(self.pairing.pairs)
        # Stars know the ratio of two frames better than two zero points do.
        self.factor = 1.0 / self.pairing.flux_ratio if len(self.pairing.pairs) >= 3 else factor
        self.zoom = (1.0 / self.pairing.affine.area) ** 0.5
        """Pixels of the best in one pixel of this frame."""

    def star(self, i: int) -> Cut | None:
        j = self.partner.get(i)
        return None if j is None else self.scene.stars[j]

    def sample(self, grid: Cut, cut: Cut) -> Cut:
        return resampled(cut, self.pairing.affine, grid, self.factor)


def resampled(cut: Cut, affine: Affine, grid: Cut, factor: float) -> Cut:
    """``cut`` on the pixels of ``grid``, its light multiplied by ``factor``.

    Interpolation correlates pixels; each keeps the variance of the pixel it came from, so that sums over many pixels
    have the right noise.
    """
    ny, nx = grid.good.shape
    columns, rows = np.meshgrid(np.arange(nx) + float(grid.x0), np.arange(ny) + float(grid.y0))
    x, y = affine(columns.ravel(), rows.ravel())
    at = sampling(x - cut.x0, y - cut.y0, cut.good.shape)
    good = (at.inside & (np.abs(at.read((~cut.good).astype(float))) < 0.2)).reshape(ny, nx)
    factor = factor * affine.area
    light = np.where(good, at.read(cut.light_e).reshape(ny, nx) * factor, 0.0)
    variance = np.maximum(at.read(cut.variance_e2), 0.5 * float(np.min(cut.variance_e2))).reshape(ny, nx)
    # A coarser pixel's noise is shared by the finer ones it is spread over.
    return replace(grid, light_e=light, variance_e2=variance * factor**2 / affine.area, good=good)


def _weight(scene: Scene, factor: float, zoom: float) -> float:
    noise = (scene.sky_e_px + scene.readout_e2) * factor**2 / zoom**2
    return 1.0 / (noise * (scene.fwhm_px * zoom) ** 2)


def _combine(first: Cut, others: list[Cut], weights: Floats) -> Cut:
    from scipy.ndimage import maximum_filter

    light = np.array([first.light_e] + [cut.light_e for cut in others])
    variance = np.array([first.variance_e2] + [cut.variance_e2 for cut in others])
    good = np.array([first.good] + [cut.good for cut in others])
    middle = np.median(light, axis=0) if len(light) > 2 else light.min(axis=0)
    local = maximum_filter(np.abs(middle), 3, mode="nearest")
    good &= np.abs(light - middle) < OUTLIER_SIGMA * np.sqrt(variance) * (1.0 if len(light) > 2 else 1.5) + (
        OUTLIER_SHARE * local
    )
    share = np.where(good, weights[:, None, None], 0.0)
    total = share.sum(axis=0)
    known = total > 0
    safe = np.where(known, total, 1.0)
    mean = (share * light).sum(axis=0) / safe
    noise = (share**2 * variance).sum(axis=0) / safe**2
    noise = np.where(known, noise, np.median(noise[known]) if known.any() else 1.0)
    return replace(first, light_e=filled(mean, known), variance_e2=noise, good=known)
