"""Fluxes under a known profile: weighted sums with cosmic rays left out, close neighbours together.

The weights are profile over variance (Horne 1986, PASP 98, 609; Naylor 1998, MNRAS 296, 339), the variance being that
of the model and not of the pixels themselves, so that noise does not bias the sum.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.psf import Psf
from reduce.records import CalibratedImage, Floats, Mask, PixelFlag, StarFlag
from reduce.stars.stamps import cut_out, offsets_of

FIT_FWHM = 2.0
"""Pixels within this radius enter the sum."""
NEIGHBOUR_FWHM = FIT_FWHM + 2.5
"""Stars nearer than this are solved together."""
REJECT_SIGMA = 4.5
GROW_SIGMA = 3.0
"""Beside a rejected pixel this much is enough: a cosmic ray's rim."""
SHAPE_ERR = 0.03
"""The profile may be off by this fraction of the brightest light within one pixel."""
PLACE_ERR_FWHM = 0.03
"""A star may be off by so much from where its own light says it is."""
OFFSET_FWHM = 0.1
"""How far its light is expected from its position; what that does to a pixel is no cosmic ray."""
UNSETTLED = 2.0
"""Pixels that stick out so many times more after all rounds flag the sum too."""
ROUNDS = 8
LOST_SHARE = 0.5
"""Where bad or rejected pixels held more of the weight, the sum is flagged."""

Pairs = tuple[NDArray[np.int64], NDArray[np.int64], Floats]
"""Star, neighbour (both (m,) rows of the cut-outs) and the neighbours' profiles (m, s, s) on the stars' cut-outs."""


@dataclass(frozen=True, slots=True)
class PsfFluxes:
    """Arrays of shape (n,)."""

    flux_e: Floats
    err_e: Floats
    """NaN where too few pixels were left."""
    chi2: Floats
    """Reduced."""
    x_off_px: Floats
    y_off_px: Floats
    """How far the light lies from the given position; the flux is that at the position."""
    n_rejected: NDArray[np.int64]
    flags: NDArray[np.uint32]
    """COSMIC_RAY, BAD_PIXEL or EDGE where rejected, bad or missing pixels held more than half of the weight,
    SATURATED where there is one."""


def psf_flux(
    data_e: Floats,
    variance_e2: Floats,
    mask: Mask,
    sky_e_px: Floats,
    light: Floats,
    slopes: tuple[Floats, Floats],
    within: NDArray[np.bool_],
    *,
    fwhm_px: float,
    sky_err_e_px: Floats | None = None,
    sensitivity: Floats | None = None,
    flat_err: float = 0.0,
    pairs: Pairs | None = None,
) -> PsfFluxes:
    """Fluxes of stars at fixed positions.

    Parameters
    ----------
    data_e, variance_e2, mask
        (n, s, s) cut-outs: electrons, their variance without the star's own photons (those of sky and host belong in
        it; NaN outside the image), and PixelFlag bits. A pixel without a number does not count.
    sky_e_px, sky_err_e_px
        (n,) level to subtract and its error; None: known.
    light, slopes
        (n, s, s) profile of each star, `Psf.light`, and its change with x and with y, `Psf.slopes`.
    within
        (n, s, s) pixels that enter the sum.
    sensitivity
        (n, s, s) flat that the light was divided by, `CalibratedImage.sensitivity`; None: 1.
    flat_err
        Noise of the flat as a fraction of the light.
    pairs
        Neighbours that are solved together with the stars.

    Returns
    -------
    PsfFluxes
        Unbiased after rejection: a pixel left out takes its share of the profile with it.
    """
    n = len(data_e)
    level = sky_e_px[:, None, None]
    known = np.isfinite(data_e) & np.isfinite(variance_e2) & (mask == 0) & np.isfinite(level)
    light = np.maximum(light, 0.0)
    star = np.where(known, data_e - level, 0.0)
    base = np.where(known, variance_e2, 1.0)
    usable = known & within
    photons = 1.0 if sensitivity is None else 1.0 / np.where(known, np.maximum(sensitivity, 1e-3), 1.0)
    bad = np.zeros_like(usable)
    slope_x, slope_y = slopes
    tolerance = _tolerance(light, slope_x, slope_y, fwhm_px)
    flux = np.zeros(n)
    final = False
    for k in range(ROUNDS):
        mine = np.maximum(flux, 0.0)[:, None, None]
        glow, others = _glow(light, mine, flux, pairs)
        variance = base + glow * photons + (flat_err * (glow + np.maximum(level, 0.0))) ** 2 if k else base
        weight = np.where(usable & ~bad, light / variance, 0.0)
        flux, covariance, own = _solve(weight, star, light, pairs)
        if k < 2:
            continue
        glow, others = _glow(light, np.maximum(flux, 0.0)[:, None, None], flux, pairs)
        residual = star - flux[:, None, None] * light - others
        x_off, y_off = _offset(residual, np.where(usable & ~bad, 1.0 / variance, 0.0), flux, slope_x, slope_y, fwhm_px)
        centred = residual + flux[:, None, None] * (x_off[:, None, None] * slope_x + y_off[:, None, None] * slope_y)
        noise = np.sqrt(variance + (flux[:, None, None] * tolerance) ** 2)
        score = np.where(usable, np.abs(centred) / noise, 0.0)
        if final:
            break
        worst = np.where(bad, 0.0, score).max(axis=(1, 2), initial=0.0)
        if (worst <= REJECT_SIGMA).all() or k >= ROUNDS - 3:
            # Once nothing sticks out, what was thrown out too early comes back and a cosmic ray's rim goes.
            hit = score > REJECT_SIGMA
            rim = _beside(hit) & (centred > GROW_SIGMA * noise) & usable
            now = hit | rim
            if np.array_equal(now, bad) or not (bad.any() or now.any()):
                break
            bad, final = now, True
            continue
        bar = np.maximum(REJECT_SIGMA, worst / 2.0)
        bad |= score > bar[:, None, None]
    full = np.where(within, light**2 / variance, 0.0)
    whole = np.maximum(full.sum((1, 2)), 1e-300)
    good = usable & ~bad
    n_good = good.sum((1, 2))
    lever = weight.sum((1, 2)) / np.maximum(own, 1e-300)
    sky_err = np.zeros(n) if sky_err_e_px is None else sky_err_e_px
    err = np.sqrt(covariance + (lever * sky_err) ** 2)
    measured = (n_good >= 3) & (own > 0.1 * whole) & np.isfinite(sky_e_px) & np.isfinite(err)
    chi2 = (np.where(good, residual**2 / variance, 0.0).sum((1, 2))) / np.maximum(n_good - 1, 1)
    flags = np.zeros(n, np.uint32)
    for flag, where in (
        (StarFlag.COSMIC_RAY, bad),
        (StarFlag.BAD_PIXEL, within & ~known & np.isfinite(variance_e2)),
        (StarFlag.EDGE, within & ~np.isfinite(variance_e2)),
    ):
        share = np.where(where, full, 0.0).sum((1, 2)) / whole
        flags |= np.where(share > LOST_SHARE, flag, 0).astype(np.uint32)
    # What still sticks out after all rounds is no star with a cosmic ray on it but something else.
    unsettled = (np.where(good, score, 0.0) > UNSETTLED * REJECT_SIGMA).any(axis=(1, 2))
    flags |= np.where(unsettled, StarFlag.COSMIC_RAY, 0).astype(np.uint32)
    saturated = (within & ((mask & PixelFlag.SATURATED) > 0)).any(axis=(1, 2))
    flags |= np.where(saturated, StarFlag.SATURATED, 0).astype(np.uint32)
    return PsfFluxes(
        np.where(measured, flux, np.nan), np.where(measured, err, np.nan), chi2, x_off, y_off, bad.sum((1, 2)),
        flags,
    )  # fmt: skip


def _tolerance(light: Floats, slope_x: Floats, slope_y: Floats, fwhm_px: float) -> Floats:
    """What a wrong shape and a wrong place may do to each pixel of a unit star."""
    around = light.copy()
    for axis in (1, 2):
        for step in (1, -1):
            around = np.maximum(around, np.roll(light, step, axis))
    return np.hypot(SHAPE_ERR * around, PLACE_ERR_FWHM * fwhm_px * np.hypot(slope_x, slope_y))


def _offset(
    residual: Floats, weight: Floats, flux: Floats, slope_x: Floats, slope_y: Floats, fwhm_px: float
) -> tuple[Floats, Floats]:
    """How far each star's light lies from its position, held to `OFFSET_FWHM` where noise would say anything."""
    held = (OFFSET_FWHM * fwhm_px) ** -2
    xx = np.einsum("nij,nij,nij->n", weight, slope_x, slope_x) * flux**2 + held
    yy = np.einsum("nij,nij,nij->n", weight, slope_y, slope_y) * flux**2 + held
    xy = np.einsum("nij,nij,nij->n", weight, slope_x, slope_y) * flux**2
    x = -np.einsum("nij,nij,nij->n", weight, slope_x, residual) * flux
    y = -np.einsum("nij,nij,nij->n", weight, slope_y, residual) * flux
    det = xx * yy - xy**2
    return (yy * x - xy * y) / det, (xx * y - xy * x) / det


def _beside(hit: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """The eight neighbours of every hit."""
    found = hit.copy()
    found[:, 1:] |= hit[:, :-1]
    found[:, :-1] |= hit[:, 1:]
    row = found.copy()
    found[:, :, 1:] |= row[:, :, :-1]
    found[:, :, :-1] |= row[:, :, 1:]
    return found & ~hit


def _glow(light: Floats, mine: Floats, flux: Floats, pairs: Pairs | None) -> tuple[Floats, Floats | float]:
    """Light of star and neighbours for the variance, and that of the neighbours for the residuals."""
    glow = mine * light
    if pairs is None or len(pairs[0]) == 0:
        return glow, 0.0
    star, other, theirs = pairs
    others = np.zeros_like(light)
    np.add.at(others, star, flux[other][:, None, None] * theirs)
    return glow + np.maximum(others, 0.0), others


def _solve(weight: Floats, star: Floats, light: Floats, pairs: Pairs | None) -> tuple[Floats, Floats, Floats]:
    """Fluxes, their variances and each star's own term of the normal matrix."""
    own = np.einsum("nij,nij->n", weight, light)
    sums = np.einsum("nij,nij->n", weight, star)
    safe = np.maximum(own, 1e-300)
    flux, variance = sums / safe, 1.0 / safe
    if pairs is None or len(pairs[0]) == 0:
        return flux, variance, own
    i, j, theirs = pairs
    together = np.unique(np.concatenate([i, j]))
    place = np.full(len(own), -1)
    place[together] = np.arange(len(together))
    matrix = np.diag(safe[together])
    np.add.at(matrix, (place[i], place[j]), np.einsum("mij,mij->m", weight[i], theirs))
    matrix += np.eye(len(together)) * 1e-9 * safe[together]
    inverse = np.linalg.inv(matrix)
    flux[together] = np.einsum("ij,j->i", inverse, sums[together])
    variance[together] = np.maximum(np.diag(inverse), variance[together])
    return flux, variance, own


def measure_psf(
    image: CalibratedImage, table: NDArray[Any], neighbours_xy: Floats, fwhm_px: float, psf: Psf | None
) -> None:
    """Fill the PSF columns of STAR_DTYPE rows in place; without a point-spread function they stay "not measured".

    Stars within 4.5 FWHM of each other are solved together, stars of ``neighbours_xy`` that are no rows too: what lies
    within one FWHM of a row is that row. The error is that of photons, read-out and sky; what a wrong profile adds is
    left to the scatter of the comparison stars.
    """
    table["psf_flux_e"], table["psf_flux_err_e"] = np.nan, 0.0
    n = len(table)
    if psf is None or n == 0:
        return
    x, y = table["x_px"].astype(float), table["y_px"].astype(float)
    reach = NEIGHBOUR_FWHM * fwhm_px
    apart = np.hypot(neighbours_xy[None, :, 0] - x[:, None], neighbours_xy[None, :, 1] - y[:, None])
    near = (apart < reach).any(axis=0) & ~(apart <= fwhm_px).any(axis=0)
    x = np.concatenate([x, neighbours_xy[near, 0]])
    y = np.concatenate([y, neighbours_xy[near, 1]])
    apart = np.hypot(x[None, :] - x[:, None], y[None, :] - y[:, None])
    nearest_row = np.argmin(apart[n:, :n], axis=1) if n < len(x) else np.zeros(0, int)
    sky = np.concatenate([table["sky_e_px"], table["sky_e_px"][nearest_row]])
    half = math.ceil(FIT_FWHM * fwhm_px)
    dx, dy = offsets_of(x, y, half)
    within = dx**2 + dy**2 <= (FIT_FWHM * fwhm_px) ** 2
    # Two targets at one place cannot be told apart; neither counts as the other's neighbour.
    i, j = np.nonzero((apart < reach) & (apart > 0.3 * fwhm_px))
    pairs: Pairs | None = None
    if len(i):
        theirs = psf.light(dx[i] + (x[i] - x[j])[:, None, None], dy[i] + (y[i] - y[j])[:, None, None], x[j], y[j])
        pairs = (i, j, np.maximum(theirs, 0.0))
    data = cut_out(image.data_e, x, y, half, np.nan).astype(float)
    readout = cut_out(image.variance_e2, x, y, half, np.nan).astype(float)
    mask = cut_out(image.mask, x, y, half, 0)
    sensitivity = None if image.sensitivity is None else cut_out(image.sensitivity, x, y, half, 1.0).astype(float)
    glow = np.maximum(sky, 0.0)[:, None, None] / (1.0 if sensitivity is None else np.maximum(sensitivity, 1e-3))
    light = psf.light(dx, dy, x, y)
    found = psf_flux(
        data, readout + glow, mask, sky, light, psf.slopes(light, dx, dy, x, y), within, sensitivity=sensitivity,
        fwhm_px=fwhm_px, sky_err_e_px=np.concatenate([table["sky_err_e_px"], np.zeros(int(near.sum()))]),
        flat_err=image.relative_flat_error, pairs=pairs,
    )  # fmt: skip
    measured = np.isfinite(found.err_e[:n])
    table["psf_flux_e"] = found.flux_e[:n]
    table["psf_flux_err_e"] = np.where(measured, found.err_e[:n], 0.0)
    table["psf_dx_px"], table["psf_dy_px"] = found.x_off_px[:n], found.y_off_px[:n]
    table["psf_chi2"], table["psf_rejected"] = found.chi2[:n], found.n_rejected[:n]
    kept = np.uint32(StarFlag.NO_CENTROID | StarFlag.NON_LINEAR)
    table["psf_flags"] = found.flags[:n] | (table["flags"][:, 0] & kept)
