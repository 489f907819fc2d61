"""The flux at one forced position of a difference: weighted under the point-spread function, and through apertures."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.aperture import circle_overlap, ladder_radii_px
from reduce.measure.blur import BlurMatch, Matched
from reduce.measure.psf import Psf
from reduce.measure.psf_flux import LOST_SHARE
from reduce.measure.scene import Scene
from reduce.records import Floats, StarFlag

WEIGHT_FWHM = 2.0
"""Radius of the weighted sum."""
REJECT_SIGMA = 4.5
REJECT_LIGHT = 0.1
"""Of the target's own light in a pixel: an error of its model that is no cosmic ray."""
BESIDE_SIGMA = 2.5
"""A pixel beside a rejected one is left out from here."""
STRUCK_SIGMA, STRUCK_LIGHT, STRUCK_FWHM = 6.0, 0.3, 2.2
"""A pixel of the frame this much above the noise and above this share of the light around, near the target, is a cosmic
ray's; looked for before a frame is convolved."""
ROUNDS = 12
LEAST_LIGHT = 0.5
"""Of the point-spread function within the radius; with less of it usable, nothing is stated."""
WHOLE = 0.99
"""Of an aperture's area that must lie on the stamp."""


@dataclass(frozen=True, slots=True)
class Difference:
    """The target's stamp without its host; all arrays (ny, nx) unless they say otherwise."""

    light: Floats
    good: NDArray[np.bool_]
    shape: Floats
    """Light of a unit star of the frame, as blurred as the difference."""
    frame_shape: Floats
    """The same as on the frame."""
    fwhm_px: float
    dx: Floats
    """(nx,) offsets from the forced position."""
    dy: Floats
    """(ny,)."""
    host: Floats
    """What was taken off, without the differential sky."""
    base_e2: Floats
    """Variance of the frame's pixels without the target's photons; (Y, X) padded when the frame was convolved."""
    base_shape: Floats
    """Unit star on those pixels."""
    terms: Floats
    """(k, ny, nx) how the difference changes with each number of the fit, the target's own light taken apart."""
    star_terms: Floats
    """(k, ny, nx) the same for a unit star; zero unless the frame was convolved."""
    covariance: Floats
    """(k, k)."""
    scatter_err: float
    kernel: Floats
    """(s, s)."""
    convolved_frame: bool
    frame_fwhm_px: float
    sky_err_e_px: float
    other_variance: Callable[[Floats], float]
    """Of a weighted sum, from the noise of what was taken off."""
    other_e2: float
    """The same of one pixel, middle."""
    n_struck: int = 0
    """Pixels of a convolved frame that were left out before."""

    def radius(self) -> Floats:
        """Of each pixel from the forced position."""
        return np.hypot(self.dx[None, :], self.dy[:, None])

    def frame_variance(self, weights: Floats, flux_e: float) -> float:
        """Of a weighted sum, from the frame's photons and read-out."""
        noise = self.base_e2 + max(flux_e, 0.0) * np.maximum(self.base_shape, 0.0)
        return float((self.on_frame(weights) ** 2 * noise).sum())

    def on_frame(self, weights: Floats) -> Floats:
        """Weights on the frame's own pixels."""
        return spread(weights, self.kernel, 1) if self.convolved_frame else weights

    def fit_variance(self, weights: Floats, flux_e: float) -> float:
        """Of a weighted sum, from kernel and differential sky."""
        slope = np.einsum("kij,ij->k", self.terms - flux_e * self.star_terms, weights)
        return max(float(slope @ self.covariance @ slope), 0.0)


def spread(weights: Floats, kernel: Floats, step: int) -> Floats:
    """Weights on the padded grid that a convolution read, from the weights on its result."""
    ny, nx = weights.shape
    size = kernel.shape[0]
    fine = np.zeros((step * (ny - 1) + 1, step * (nx - 1) + 1))
    fine[::step, ::step] = weights
    shape = (fine.shape[0] + size - 1, fine.shape[1] + size - 1)
    back = np.fft.rfft2(fine, shape) * np.fft.rfft2(kernel[::-1, ::-1], shape)
    return np.asarray(np.fft.irfft2(back, shape))


def difference(scene: Scene, row: Any, psf: Psf, match: BlurMatch, found: Matched) -> Difference:
    """The target's stamp of the frame minus that of the reference at one blur, differential sky taken off."""
    target = scene.target
    x0, y0, nx, ny = match.target_window
    x_px, y_px = float(row["x_px"]), float(row["y_px"])
    patch = match.target_patch
    terms = patch.terms.reshape(-1, ny, nx)
    plane = match.plane(patch).reshape(3, ny, nx)
    sky = np.einsum("k,kij->ij", found.plane, plane)
    matched = np.einsum("k,kij->ij", found.coefficient, terms)
    kernel = np.einsum("k,kij->ij", found.coefficient, match.basis.images())
    shape = psf.at(x_px, y_px, x0, y0, (ny, nx))
    pad = match.basis.half
    other = match.reference.target
    convolved_frame = match.side == "frame"
    blunt = patch.blunt.reshape(ny, nx)
    good, n_struck = patch.clear.reshape(ny, nx), 0
    if not convolved_frame:
        light, host = blunt - matched - sky, matched
        # The host's own photons come from the matched reference: the frame's would weigh its own noise.
        base = scene.readout_e2 + np.maximum(scene.sky_e_px + sky + host, 0.0)
        blurred, base_shape, star_terms = shape, shape, np.zeros_like(terms)
        fwhm = scene.fwhm_px
    else:
        wide = psf.at(x_px, y_px, x0 - pad, y0 - pad, (ny + 2 * pad, nx + 2 * pad))
        struck = _struck(scene, shape, blunt / kernel.sum(), x_px - x0, y_px - y0)
        n_struck = int((struck & target.good).sum())
        # Convolved, a cosmic ray would hide in the star: its pixels hold the host alone, and the star lacks them.
        padded = np.pad(np.where(struck, blunt / kernel.sum(), target.light_e), pad, mode="constant")
        wide = np.where(np.pad(struck, pad), 0.0, wide)
        terms = match.basis.convolve(padded[None], (ny, nx))[:, 0]
        lost = np.pad(~(target.good | struck), pad, constant_values=True).astype(float)
        good = patch.held.reshape(ny, nx) & (match.basis.convolve(lost[None], (ny, nx))[0, 0] < 0.02)
        light, host = np.einsum("k,kij->ij", found.coefficient, terms) - blunt + sky, blunt
        star_terms = match.basis.convolve(wide[None], (ny, nx))[:, 0]
        blurred = np.einsum("k,kij->ij", found.coefficient, star_terms)
        base = np.pad(np.where(struck, 0.0, target.variance_e2), pad, mode="edge")
        base_shape = np.zeros_like(base)
        fwhm = match.reference_fwhm

    def reference_variance(weights: Floats) -> float:
        grid = weights if convolved_frame else spread(weights, kernel, match.basis.step)
        at = match.reference_at(other, x0, y0, nx, ny, *((0, 1) if convolved_frame else (pad, match.basis.step)))
        own = at.back(grid.ravel() * match.area)
        return float((own**2 * other.variance_e2).sum())

    constant = len(found.coefficient)
    return Difference(
        light=light, good=good, shape=blurred, frame_shape=shape, fwhm_px=fwhm,
        dx=np.arange(nx, dtype=np.float64) + x0 - x_px, dy=np.arange(ny, dtype=np.float64) + y0 - y_px, host=host,
        base_e2=base, base_shape=base_shape,
        terms=np.concatenate([terms, plane]), star_terms=np.concatenate([star_terms, np.zeros_like(plane)]),
        covariance=found.covariance, scatter_err=found.scatter_err, kernel=kernel, convolved_frame=convolved_frame,
        frame_fwhm_px=scene.fwhm_px, sky_err_e_px=math.sqrt(max(float(found.covariance[constant, constant]), 0.0)),
        other_variance=reference_variance, other_e2=float(np.median(other.variance_e2)) * match.area,
        n_struck=n_struck,
    )  # fmt: skip


def _struck(scene: Scene, shape: Floats, host: Floats, x: float, y: float) -> NDArray[np.bool_]:
    """Pixels of the frame near the target that are masked, or brighter than target and host can make them."""
    cut = scene.target
    gy, gx = np.ogrid[: shape.shape[0], : shape.shape[1]]
    near = np.hypot(gx - x, gy - y) < STRUCK_FWHM * scene.fwhm_px
    star = cut.light_e - host
    core = near & cut.good & (shape > 0.1 * shape.max())
    flux = max(_weighted_median(star[core] / shape[core], shape[core]), 0.0) if core.any() else 0.0
    noise = np.sqrt(scene.readout_e2 + np.maximum(scene.sky_e_px + np.maximum(host, 0.0) + flux * shape, 0.0))
    excess = star - flux * shape - STRUCK_LIGHT * (flux * shape + np.maximum(host, 0.0))
    hit = near & cut.good & (excess > STRUCK_SIGMA * noise)
    return hit | (_beside(hit) & near & (excess > BESIDE_SIGMA * noise)) | (near & ~cut.good)


def _beside(where: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Pixels that share a side with one of ``where``."""
    beside = np.zeros_like(where)
    for shift in ((1, 0), (-1, 0), (0, 1), (0, -1)):
        beside |= np.roll(where, shift, (0, 1))
    return beside


def _weighted_median(values: Floats, weights: Floats) -> float:
    order = np.argsort(values, kind="stable")
    share = np.cumsum(weights[order])
    return float(values[order][np.searchsorted(share, 0.5 * share[-1])])


@dataclass(frozen=True, slots=True)
class ForcedFlux:
    """A flux at a forced position, electrons on the frame."""

    flux_e: float
    err_e: float
    """Without the noise of what was taken off."""
    other_err_e: float
    chi2: float
    n_rejected: int
    flags: int
    host_e: float
    """Light of the host under the same weights."""


def forced_flux(d: Difference) -> ForcedFlux | None:
    """Flux under the point-spread function; pixels that it cannot explain are left out."""
    radius = d.radius()
    inside = radius < WEIGHT_FWHM * d.fwhm_px
    use = inside & d.good
    if d.shape[use].sum() < LEAST_LIGHT * d.shape[inside].sum() or not use.any():
        return None
    flux = _robust_start(d, use)
    covariance = _covariance(d, inside) if d.convolved_frame else None
    weights = np.zeros_like(d.light)
    sigma = np.ones_like(d.light)
    for _ in range(ROUNDS):
        sigma2 = _pixel_variance(d, flux, inside, covariance)
        residual = d.light - flux * d.shape
        sigma = np.sqrt(sigma2 + (REJECT_LIGHT * flux * d.shape) ** 2)
        strange = np.where(use, np.abs(residual) / sigma, 0.0)
        worst = float(strange.max())
        if worst > REJECT_SIGMA:
            use &= strange < max(REJECT_SIGMA, 0.5 * worst)
        weights = _weights(d, sigma2, use, inside, covariance)
        now = float((weights * d.light).sum())
        moved, flux = abs(now - flux), now
        if worst <= REJECT_SIGMA and moved < 1e-3 * math.sqrt(float((weights**2 * sigma2).sum())):
            break
    lost = inside & d.good & ~use
    if lost.any():
        use &= ~(_beside(lost) & (d.light - flux * d.shape > BESIDE_SIGMA * sigma))
    if d.shape[use].sum() < LEAST_LIGHT * d.shape[inside].sum():
        return None
    sigma2 = _pixel_variance(d, flux, inside, covariance)
    weights = _weights(d, sigma2, use, inside, covariance)
    flux = float((weights * d.light).sum())
    host = float((weights * d.host).sum())
    variance = d.frame_variance(weights, flux) + d.fit_variance(weights, flux) + (d.scatter_err * host) ** 2
    chi2 = float(((d.light - flux * d.shape)[use] ** 2 / sigma2[use]).sum()) / max(int(use.sum()) - 1, 1)
    flags = StarFlag(0)
    # The error knows of missing pixels; the flag is for a flux that rests on the profile's wings.
    if (d.shape[inside & ~d.good] ** 2).sum() > LOST_SHARE * (d.shape[inside] ** 2).sum():
        flags |= StarFlag.BAD_PIXEL
    n_rejected = d.n_struck + int((inside & d.good & ~use).sum())
    return ForcedFlux(
        flux, math.sqrt(variance), math.sqrt(d.other_variance(weights)), chi2, n_rejected, int(flags), host
    )


def _robust_start(d: Difference, use: NDArray[np.bool_]) -> float:
    """Weighted median of light over profile: one cosmic ray does not move it."""
    core = use & (d.shape > 0.1 * d.shape[use].max())
    return _weighted_median(d.light[core] / d.shape[core], d.shape[core])


def _pixel_variance(d: Difference, flux: float, inside: NDArray[np.bool_], covariance: Floats | None) -> Floats:
    if covariance is None:
        return d.base_e2 + max(flux, 0.0) * np.maximum(d.shape, 0.0)
    sigma2 = np.ones_like(d.light)
    sigma2[inside] = np.diag(covariance)
    return sigma2


def _weights(
    d: Difference, sigma2: Floats, use: NDArray[np.bool_], inside: NDArray[np.bool_], covariance: Floats | None
) -> Floats:
    """(ny, nx) weights whose sum over the profile is 1."""
    weights = np.zeros_like(d.light)
    if covariance is None:
        weights[use] = d.shape[use] / sigma2[use]
    else:
        at = use[inside]
        weights[use] = np.linalg.solve(covariance[np.ix_(at, at)], d.shape[use])
    return np.asarray(weights / (weights * d.shape).sum())


def _covariance(d: Difference, inside: NDArray[np.bool_]) -> Floats:
    """(p, p) of the difference's pixels when the frame was convolved: its noise is shared by neighbours."""
    rows, columns = np.nonzero(inside)
    half = (len(d.kernel) - 1) // 2
    y = np.arange(rows.min(), rows.max() + 1 + 2 * half)
    x = np.arange(columns.min(), columns.max() + 1 + 2 * half)
    gy, gx = (axis.ravel() for axis in np.meshgrid(y, x, indexing="ij"))
    # Pixel (row, column) of the difference reads pixels (row ... row + 2 half) of the padded frame.
    ky, kx = rows[:, None] + 2 * half - gy[None, :], columns[:, None] + 2 * half - gx[None, :]
    reads = (ky >= 0) & (ky <= 2 * half) & (kx >= 0) & (kx <= 2 * half)
    kernel = np.where(reads, d.kernel[np.where(reads, ky, 0), np.where(reads, kx, 0)], 0.0)
    frame = (kernel * d.base_e2[gy, gx]) @ kernel.T
    return np.asarray(frame + d.other_e2 * np.eye(len(rows)) + 0.01 * np.diag(np.diag(frame)))


def ladder(row: Any, d: Difference, flux: ForcedFlux, scale_arcsec: float) -> None:
    """Put fluxes through the ladder's apertures into a STAR_DTYPE row; NaN where the stamp does not hold them."""
    radii = ladder_radii_px(d.frame_fwhm_px, scale_arcsec)
    row["sky_err_e_px"] = d.sky_err_e_px
    for k, radius in enumerate(radii):
        part = circle_overlap(d.dx[None, None, :], d.dy[None, :, None], float(radius))[0]
        row["flux_e"][k] = row["flux_err_e"][k] = np.nan
        whole, blurred = float((part * d.frame_shape).sum()), float((part * d.shape).sum())
        if part.sum() < WHOLE * math.pi * radius**2 or not blurred > 0:
            continue
        # A convolved frame has lost light from the aperture that its stars have not.
        ratio = whole / blurred
        variance = d.frame_variance(part, flux.flux_e) + d.fit_variance(part, flux.flux_e)
        variance += (d.scatter_err * float((part * d.host).sum())) ** 2
        row["flux_e"][k] = float((part * d.light).sum()) * ratio
        row["flux_err_e"][k] = math.sqrt(variance) * ratio
