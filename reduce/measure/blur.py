"""Frame and reference brought to one blur: which of them is convolved, and with what."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from reduce.measure.kernel import CHOICES, Basis, KernelFit, Sums, fit, make_basis
from reduce.measure.resample import Affine, Sampling, sampling
from reduce.measure.scene import FEW_STARS, Cut, Pairing, Scene
from reduce.records import Floats

Side = Literal["reference", "frame"]

BLUNT_SHARE = 0.95
"""A frame whose seeing is at least this share of the reference's is met by convolving the reference."""
FINE_FWHM_PX = 2.2
"""A sharper reference is convolved on a grid twice as fine as the pixels."""
FIT_FWHM = 3.0
"""Radius about the stars whose pixels tell the kernel, in units of the blunter seeing."""
MASK_FWHM = 2.2
"""Radius about the target that says nothing on the kernel."""
MODEL_ERR = 0.01
"""Of the local light: what any kernel misses; keeps the brightest star from ruling."""
PIXEL_SIGMA = 5.0
STAR_SIGMA = 4.0
STAR_FLOOR = 0.005
"""Fraction of a star's light below which it is never called a variable."""
ROUNDS = 3
POOR_CHI2 = 3.0


@dataclass(frozen=True, slots=True)
class Patch:
    """Blunt and sharp image about one star or the target, on the frame's pixels."""

    terms: Floats
    """(k, p) the sharp image through each term of the kernel, for all its p pixels."""
    blunt: Floats
    variance: Floats
    """(p,) of the blunt image."""
    sharp_variance: float
    """Middle one."""
    level_err: float
    """How far the sky may be off at this star; 0 at the target, whose sky is a plane of the fit."""
    use: NDArray[np.bool_]
    held: NDArray[np.bool_]
    """(p,) that the blunt image holds the pixel."""
    clear: NDArray[np.bool_]
    """(p,) that both images hold the pixel and all that the kernel needs about it."""
    dx: Floats
    dy: Floats
    """(p,) offsets from the target over the field's half width."""


@dataclass(frozen=True, slots=True)
class Matched:
    """The kernel at the target and how well it is known."""

    coefficient: Floats
    """(k,) of all terms, 0 where not taken."""
    covariance: Floats
    """(k + 3, k + 3) of coefficients and plane, from the noise of the pixels."""
    plane: Floats
    """(3,) differential sky over the target's stamp."""
    chi2: float
    scale_err: float
    """Relative, of the kernel's sum."""
    scatter_err: float
    """The part of it that photons do not explain."""
    stars: tuple[tuple[float, float, float, float], ...]
    notes: tuple[str, ...]


class BlurMatch:
    """Frame and reference while the kernel between them is found."""

    def __init__(self, scene: Scene, reference: Scene, pairing: Pairing) -> None:
        self.scene, self.reference, self.pairing = scene, reference, pairing
        self.affine: Affine = pairing.affine
        self.area = self.affine.area
        self.reference_fwhm = reference.fwhm_px / self.area**0.5
        self.side: Side = "reference" if scene.fwhm_px >= BLUNT_SHARE * self.reference_fwhm else "frame"
        self.blunt_fwhm = max(scene.fwhm_px, self.reference_fwhm)
        few = len(pairing.pairs) < FEW_STARS
        sharp, blunt = self.reference_fwhm, scene.fwhm_px
        if self.side == "frame":
            sharp, blunt = blunt, sharp
        step = 2 if self.side == "reference" and sharp < FINE_FWHM_PX else 1
        self.basis: Basis = make_basis(sharp, blunt, step, single=few)
        self.few = few
        self.scale = pairing.flux_ratio if self.side == "frame" else 1.0 / pairing.flux_ratio
        """Light of the blunt image over that of the sharp one, to begin with."""
        blunt_err, sharp_err = scene.sky_err_e_px, reference.sky_err_e_px * self.area
        if self.side == "frame":
            blunt_err, sharp_err = sharp_err, blunt_err
        self.level_err = math.hypot(blunt_err, self.scale * sharp_err)
        gauss = self.basis.images()[0]
        self.shrink = float((gauss**2).sum()) * step**2
        """Noise power of a convolved image."""

    # ---- patches ---------------------------------------------------------------------------------------------------

    def window(self, cut: Cut, half: int) -> tuple[int, int, int, int]:
        """x0, y0, nx, ny of the pixels of the frame about a star."""
        return round(cut.x_px) - half, round(cut.y_px) - half, 2 * half + 1, 2 * half + 1

    def reference_at(self, cut: Cut, x0: int, y0: int, nx: int, ny: int, pad: int, step: int) -> Sampling:
        """How the reference's stamp ``cut`` is read on the frame's pixels, ``step`` points a pixel."""
        columns = x0 + (np.arange(step * (nx - 1) + 1 + 2 * pad) - pad) / step
        rows = y0 + (np.arange(step * (ny - 1) + 1 + 2 * pad) - pad) / step
        gx, gy = np.meshgrid(columns, rows)
        x, y = self.affine(gx.ravel(), gy.ravel())
        return sampling(x - cut.x0, y - cut.y0, cut.good.shape)

    def patch(self, mine: Cut, theirs: Cut, window: tuple[int, int, int, int], reach: float | None) -> Patch:
        """Both images about one star (``reach``: radius to use) or the target (None: all but its own disc)."""
        x0, y0, nx, ny = window
        pad, step = self.basis.half, self.basis.step
        light, variance, good = _crop(mine, x0, y0, nx, ny)
        if self.side == "reference":
            at = self.reference_at(theirs, x0, y0, nx, ny, pad, step)
            shape = (step * (ny - 1) + 1 + 2 * pad, step * (nx - 1) + 1 + 2 * pad)
            sharp = at.read(theirs.light_e).reshape(shape) * self.area
            bad = (~at.inside | (np.abs(at.read((~theirs.good).astype(float))) > 0.2)).reshape(shape)
            blunt, noise = light, variance
            sharp_variance = float(np.median(theirs.variance_e2)) * self.area
        else:
            at = self.reference_at(theirs, x0, y0, nx, ny, 0, 1)
            blunt = at.read(theirs.light_e).reshape(ny, nx) * self.area
            noise = np.maximum(at.read(theirs.variance_e2).reshape(ny, nx), 0.5 * theirs.variance_e2.min()) * self.area
            good = (at.inside & (np.abs(at.read((~theirs.good).astype(float))) < 0.2)).reshape(ny, nx)
            sharp, _, fine = _crop(mine, x0 - pad, y0 - pad, nx + 2 * pad, ny + 2 * pad)
            bad = ~fine
            sharp_variance = float(np.median(variance))
        terms = self.basis.convolve(sharp[None], (ny, nx))[:, 0]
        y, x = np.mgrid[0:ny, 0:nx]
        radius = np.hypot(x + x0 - mine.x_px, y + y0 - mine.y_px)
        if reach is None:
            # The host may go on beyond the stamp: only where the kernel finds all it needs.
            lost = self.basis.convolve(bad.astype(float)[None], (ny, nx))[0, 0]
            clear = good & (lost < 0.02)
            use = clear & (radius > MASK_FWHM * self.blunt_fwhm)
        else:
            core = bad[pad : pad + step * (ny - 1) + 1 : step, pad : pad + step * (nx - 1) + 1 : step]
            clear = good & ~core
            use = clear & (radius < reach)
        noise = noise + self.scale**2 * sharp_variance * self.shrink
        noise = noise + (MODEL_ERR * np.maximum(self.scale * terms[0], 0.0)) ** 2
        return Patch(
            terms.reshape(len(terms), -1), blunt.ravel(), noise.ravel(), sharp_variance,
            0.0 if reach is None else self.level_err, use.ravel(), good.ravel(), clear.ravel(),
            (x + x0 - self.scene.target.x_px).ravel(), (y + y0 - self.scene.target.y_px).ravel(),
        )  # fmt: skip

    # ---- fit -------------------------------------------------------------------------------------------------------

    def solve(self) -> Matched | None:
        """Kernel, differential sky, and the scale's error; None where nothing is left to fit."""
        half = math.ceil(FIT_FWHM * self.blunt_fwhm)
        patches = [
            self.patch(self.scene.stars[i], self.reference.stars[j], self.window(self.scene.stars[i], half),
                       FIT_FWHM * self.blunt_fwhm)
            for i, j in self.pairing.pairs
        ]  # fmt: skip
        target = self.scene.target
        ny, nx = target.good.shape
        self.target_window = target.x0, target.y0, nx, ny
        self.target_patch = self.patch(target, self.reference.target, self.target_window, None)
        if self.target_patch.use.sum() < 30:
            return None
        taken = np.array([patch.use.sum() > self.blunt_fwhm**2 for patch in patches])
        if not taken.any():
            return None
        sets = [self.basis.chosen(degrees) for degrees in CHOICES] if not self.few else [np.array([0])]
        k = len(self.basis.terms)
        plane = np.arange(k, k + 3)
        sets = [np.concatenate([terms, plane]) for terms in sets]
        ratio, ratio_err = np.ones(len(patches)), np.ones(len(patches))
        solved: KernelFit | None = None
        for round_ in range(ROUNDS):
            sums = self.sums([p for p, t in zip(patches, taken, strict=True) if t], self.target_patch)
            solved = fit(sums, sets if round_ == ROUNDS - 1 or solved is None else [solved.columns])
            whole = np.zeros(k + 3)
            whole[solved.columns] = solved.coefficient
            patches = [self.without_outliers(p, whole[:k], np.zeros(3)) for p in patches]
            self.target_patch = self.without_outliers(self.target_patch, whole[:k], whole[k:])
            share = self.noise_share(whole[:k])
            ratio, ratio_err = np.array([_ratio(patch, whole[:k], share) for patch in patches]).T
            scatter = _scatter(ratio[taken], ratio_err[taken])
            middle = float(np.median(ratio[taken]))
            sigma = np.hypot(np.hypot(ratio_err, scatter), STAR_FLOOR)
            now = (np.abs(ratio - middle) < STAR_SIGMA * sigma) & (ratio_err > 0) & np.isfinite(ratio)
            if not now.any():
                return None
            taken = now
        assert solved is not None
        return self.finish(solved, whole, patches, taken, ratio, ratio_err)

    def finish(
        self,
        solved: KernelFit,
        whole: Floats,
        patches: list[Patch],
        taken: NDArray[np.bool_],
        ratio: Floats,
        ratio_err: Floats,
    ) -> Matched:
        """Put the scale on the stars' fluxes and say how well it is known."""
        k = len(self.basis.terms)
        notes = []
        scatter = _scatter(ratio[taken], ratio_err[taken])
        weight = np.where(taken, 1.0 / (ratio_err**2 + scatter**2), 0.0)
        mean = float((weight * ratio).sum() / weight.sum())
        scale_err = float(weight.sum() ** -0.5)
        coefficient = whole[:k] * mean
        photons = float(np.sum(np.where(taken, ratio_err**-2.0, 0.0))) ** -0.5
        covariance = np.zeros((k + 3, k + 3))
        covariance[np.ix_(solved.columns, solved.columns)] = solved.covariance * max(solved.chi2, 1.0)
        n = int(taken.sum())
        if self.few:
            notes.append(
                f"Frame and reference share only {n} usable {'star' if n == 1 else 'stars'}: the blur is matched by "
                "one Gaussian from the two seeings, and bright hosts are not taken off well."
            )
        if solved.chi2 > POOR_CHI2:
            notes.append(
                f"The reference cannot be matched well to this frame's blur (reduced chi-squared {solved.chi2:.1f} of "
                f"{n} stars): host light may be left over."
            )
        stars = tuple(
            (self.scene.stars[i].ra_deg, self.scene.stars[i].dec_deg, float(r), float(e))
            for (i, _), r, e, t in zip(self.pairing.pairs, ratio / mean, ratio_err, taken, strict=True) if t
        )  # fmt: skip
        extra = math.sqrt(max(scale_err**2 - photons**2, 0.0))
        return Matched(coefficient, covariance, whole[k:], solved.chi2, scale_err, extra, stars, tuple(notes))

    def sums(self, patches: list[Patch], target: Patch) -> Sums:
        """Weighted sums of stars and host; and how much of them the sharp image's own noise has made."""
        k = len(self.basis.terms)
        normal, right = np.zeros((k + 3, k + 3)), np.zeros(k + 3)
        square, n, noisy = 0.0, 0, 0.0
        for patch in patches:
            weight = 1.0 / patch.variance[patch.use]
            products, sides, own = _without_level(patch.terms[:, patch.use], patch.blunt[patch.use], weight, patch)
            normal[:k, :k] += products
            right[:k] += sides
            square += own
            n += int(patch.use.sum())
            noisy += float(weight.sum()) * patch.sharp_variance
        a = np.vstack([target.terms[:, target.use], self.plane(target)[:, target.use]])
        weight = 1.0 / target.variance[target.use]
        normal += (a * weight) @ a.T
        right += (a * weight) @ target.blunt[target.use]
        square += float((weight * target.blunt[target.use] ** 2).sum())
        n += int(target.use.sum())
        noisy += float(weight.sum()) * target.sharp_variance
        images = self.basis.images().reshape(k, -1)
        noise = np.zeros_like(normal)
        noise[:k, :k] = noisy * self.basis.step**2 * (images @ images.T)
        return Sums(normal, noise, right, square, n)

    def plane(self, patch: Patch) -> Floats:
        """(3, p) columns of the differential sky about the target."""
        unit = max(self.scene.target.good.shape) / 2.0
        return np.stack([np.ones(len(patch.dx)), patch.dx / unit, patch.dy / unit])

    def noise_share(self, coefficient: Floats) -> float:
        """Noise power of the sharp image that the kernel lets through."""
        kernel = np.einsum("k,kij->ij", coefficient, self.basis.images())
        return float((kernel**2).sum()) * self.basis.step**2

    def model(self, patch: Patch, coefficient: Floats) -> Floats:
        """(p,) the sharp image through the kernel."""
        return np.asarray(np.einsum("k,kp->p", coefficient, patch.terms))

    def without_outliers(self, patch: Patch, coefficient: Floats, plane: Floats) -> Patch:
        """Leave out pixels that a cosmic ray or a variable neighbour spoils."""
        residual = patch.blunt - self.model(patch, coefficient) - plane @ self.plane(patch)
        weight = np.where(patch.use, 1.0 / patch.variance, 0.0)
        residual = residual - _level_share(weight, patch) * float((weight * residual).sum())
        spoiled = np.abs(residual) > PIXEL_SIGMA * np.sqrt(
            patch.variance + (0.02 * self.model(patch, coefficient)) ** 2
        )
        return replace(patch, use=patch.use & ~spoiled)


def _crop(cut: Cut, x0: int, y0: int, nx: int, ny: int) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Light, variance and good pixels of a window of the frame; nothing is good outside the stamp."""
    light, variance = np.zeros((ny, nx)), np.full((ny, nx), float(np.median(cut.variance_e2)))
    good = np.zeros((ny, nx), bool)
    left, low = x0 - cut.x0, y0 - cut.y0
    sy, sx = cut.good.shape
    a, b, c, d = max(left, 0), min(left + nx, sx), max(low, 0), min(low + ny, sy)
    if a < b and c < d:
        here = np.s_[c - low : d - low, a - left : b - left]
        light[here], variance[here], good[here] = cut.light_e[c:d, a:b], cut.variance_e2[c:d, a:b], cut.good[c:d, a:b]
    return light, variance, good


def _ratio(patch: Patch, coefficient: Floats, noise_share: float) -> tuple[float, float]:
    """Flux of a star over that of its matched image, and its error; the image's own noise is no light of the star."""
    model = np.einsum("k,kp->p", coefficient, patch.terms)[patch.use]
    weight = 1.0 / patch.variance[patch.use]
    products, sides, _ = _without_level(model[None], patch.blunt[patch.use], weight, patch)
    square = float(products[0, 0]) - patch.sharp_variance * noise_share * float(weight.sum())
    if not square > 0:
        return math.nan, math.inf
    return float(sides[0]) / square, square**-0.5


def _level_share(weight: Floats, patch: Patch) -> float:
    """What one unit of the weighted sum of a star's residuals says of its sky, as far as that may be off."""
    return patch.level_err**2 / (1.0 + patch.level_err**2 * float(weight.sum()))


def _without_level(terms: Floats, light: Floats, weight: Floats, patch: Patch) -> tuple[Floats, Floats, float]:
    """Weighted products of (k, p) terms, of them with the light, and its square; the star's sky is eliminated."""
    weighted = terms * weight
    share, sums, whole = _level_share(weight, patch), weighted.sum(axis=1), float((weight * light).sum())
    return (
        weighted @ terms.T - share * np.outer(sums, sums),
        weighted @ light - share * whole * sums,
        float((weight * light**2).sum()) - share * whole**2,
    )


def _scatter(ratio: Floats, error: Floats) -> float:
    """What the stars' ratios scatter beyond their errors: the least extra variance that makes χ² one a star."""
    if len(ratio) < 3:
        return STAR_FLOOR
    extra = 0.0
    for _ in range(20):
        weight = 1.0 / (error**2 + extra)
        mean = (weight * ratio).sum() / weight.sum()
        excess = (weight * (ratio - mean) ** 2).sum() - (len(ratio) - 1)
        slope = (weight**2 * (ratio - mean) ** 2).sum()
        extra = max(extra + float(excess / slope) if slope > 0 else 0.0, 0.0)
    return math.sqrt(extra)
