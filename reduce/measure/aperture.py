"""Aperture photometry of many stars at the whole ladder of radii, with errors and flags."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from reduce.measure.crowding import neighbour_light
from reduce.measure.noise import aperture_variance
from reduce.measure.sky import HOST_MISS, SkyLevels, annulus_sky
from reduce.records import (
    LADDER_ARCSEC,
    LADDER_FWHM,
    STAR_DTYPE,
    CalibratedImage,
    Floats,
    Image,
    PixelFlag,
    StarFlag,
)
from reduce.stars.stamps import cut_out, offsets_of
from reduce.stars.width import FWHM_PER_SIGMA

CROWDED_FRACTION = 0.005
"""Neighbours' light in an aperture, over the star's, from which the star is flagged."""
PEAK_FWHM = 1.5
COSMIC_SIGMA = 6.0
SHARPEST = 0.75
"""A star is never narrower than this fraction of the frame's FWHM: what is, is a cosmic ray."""
WIDTH_SNR = 10.0
"""Below it the width of a single star is not stated."""
BLOCK_PX = 60_000
"""Pixels of cut-outs worked on together: they then stay in the processor's cache."""

INSIDE_HOST_ARCSEC = 30.0
"""Nearer to a galaxy's centre its light bends much, farther little (common practice)."""


def ladder_radii_px(fwhm_px: float, scale_arcsec: float) -> Floats:
    """The N_RADII radii in pixels: LADDER_FWHM, then LADDER_ARCSEC."""
    return np.concatenate([np.array(LADDER_FWHM) * fwhm_px, np.array(LADDER_ARCSEC) / scale_arcsec])


def circle_overlap(dx: Floats, dy: Floats, radius_px: float) -> Floats:
    """Exact area of each pixel inside a circle about (0, 0).

    Parameters
    ----------
    dx, dy
        (n, 1, s) and (n, s, 1) offsets of pixel centres from the circle's centre, one pixel apart.

    Returns
    -------
    area
        (n, s, s), 0…1.

    Notes
    -----
    With h(x) the half chord, the area over a rectangle is the mixed difference over its corners of
    ``F(x, y) = ∫₀ˣ clip(y, -h, h)``, which has a closed form: a product inside the circle, plus a segment outside.
    """
    r = radius_px
    x = np.clip(np.concatenate([dx - 0.5, dx[:, :, -1:] + 0.5], axis=2), -r, r)
    y = np.clip(np.concatenate([dy - 0.5, dy[:, -1:, :] + 0.5], axis=1), -r, r)
    chord = np.sqrt((r - y) * (r + y))  # exactly 0 where y = r, which r² - y² need not be
    segment = np.sign(y) * (_under_arc(np.abs(x), r) - _under_arc(chord, r))
    corner = np.where(np.abs(x) <= chord, x * y, np.sign(x) * (chord * y + segment))
    return np.diff(np.diff(corner, axis=1), axis=2)


def _under_arc(x: Floats, r: float) -> Floats:
    """∫₀ˣ √(r² - t²) dt."""
    return 0.5 * (x * np.sqrt(np.maximum((r - x) * (r + x), 0.0)) + r**2 * np.arcsin(np.clip(x / r, -1.0, 1.0)))


def measure_stars(
    image: CalibratedImage,
    x_px: Floats,
    y_px: Floats,
    fwhm_px: float,
    scale_arcsec: float,
    neighbours_xy: Floats,
    *,
    centred: NDArray[np.bool_] | None = None,
    raw_adu: Image | None = None,
    linear_limit_adu: float | None = None,
    host_arcsec: Floats | None = None,
) -> NDArray[Any]:
    """Fluxes of many stars at their given positions.

    Parameters
    ----------
    image
        Calibrated frame with its noise model.
    x_px, y_px
        (n,) positions; they are not moved.
    fwhm_px, scale_arcsec
        Of the frame; they turn the two ladders into pixels.
    neighbours_xy
        (m, 2) positions of all stars of the frame, the measured ones included or not: what lies within one FWHM of
        a star is that star.
    centred
        (n,) False where a position is a forced one: flagged NO_CENTROID. None: all are centroids.
    raw_adu
        (ny, nx) frame as read, for ``peak_adu``; without it the peak is that of the calibrated frame over the gain.
    linear_limit_adu
        Peak above which NON_LINEAR is set.
    host_arcsec
        (n,) distance from the centre of the galaxy that the star lies on, NaN where it lies on none. None: nowhere.

    Returns
    -------
    table
        (n,) STAR_DTYPE with roles, names and sky positions left blank. A pixel without a number counts as sky and is
        flagged BAD_PIXEL; outside the image nothing is counted, and EDGE says so. The sky level is NaN where the
        annulus held no usable pixels, and so are the fluxes.
    """
    n = len(x_px)
    table = np.zeros(n, STAR_DTYPE)
    if n == 0:
        return table
    x_px, y_px = np.asarray(x_px, float), np.asarray(y_px, float)
    neighbours_xy = np.asarray(neighbours_xy, float).reshape(-1, 2)
    table["x_px"], table["y_px"] = x_px, y_px
    table["ra_deg"] = table["dec_deg"] = np.nan

    usable = (image.mask == 0) & np.isfinite(image.data_e)
    sky = annulus_sky(image.data_e, usable, neighbours_xy, x_px, y_px, fwhm_px)
    _write_sky(table, np.ones(n, bool), sky)
    for host, there in _on_hosts(host_arcsec):
        place = x_px[there], y_px[there]
        near = annulus_sky(image.data_e, usable, neighbours_xy, *place, fwhm_px, host=host)
        host_e_px = np.maximum(near.level_e_px - np.nanmedian(sky.level_e_px), 0.0)
        _write_sky(table, there, replace(near, err_e_px=np.hypot(near.err_e_px, HOST_MISS * host_e_px)))

    radii = ladder_radii_px(fwhm_px, scale_arcsec)
    half = math.ceil(radii.max() + 0.5) + 1
    step = max(1, BLOCK_PX // (2 * half + 1) ** 2)
    for start in range(0, n, step):
        _measure_block(table[start : start + step], image, raw_adu, radii, half, fwhm_px)

    crowded = neighbour_light(image.data_e, table, neighbours_xy, fwhm_px, radii) > CROWDED_FRACTION
    table["flags"] |= np.where(crowded, StarFlag.CROWDED, 0).astype(np.uint32)
    if centred is not None:
        table["flags"][~centred] |= np.uint32(StarFlag.NO_CENTROID)
    if linear_limit_adu is not None:
        table["flags"][table["peak_adu"] > linear_limit_adu] |= np.uint32(StarFlag.NON_LINEAR)
    return table


def _write_sky(table: NDArray[Any], where: NDArray[np.bool_], sky: SkyLevels) -> None:
    table["sky_e_px"][where], table["sky_sigma_e_px"][where] = sky.level_e_px, sky.sigma_e_px
    table["sky_err_e_px"][where], table["sky_n_px"][where] = sky.err_e_px, sky.n_px


def _on_hosts(host_arcsec: Floats | None) -> list[tuple[Literal["outskirts", "inside"], NDArray[np.bool_]]]:
    """Which stars lie in the outskirts of a galaxy and which inside; nothing for those on none (NaN)."""
    if host_arcsec is None:
        return []
    inside = host_arcsec < INSIDE_HOST_ARCSEC
    both: list[tuple[Literal["outskirts", "inside"], NDArray[np.bool_]]] = [
        ("outskirts", host_arcsec >= INSIDE_HOST_ARCSEC), ("inside", inside),
    ]  # fmt: skip
    return [(host, there) for host, there in both if there.any()]


def _measure_block(
    rows: NDArray[Any],
    image: CalibratedImage,
    raw_adu: Image | None,
    radii: Floats,
    half: int,
    fwhm_px: float,
) -> None:
    """Fill rows of the table in place."""
    x_px, y_px, sky = rows["x_px"], rows["y_px"], rows["sky_e_px"]
    dx, dy = offsets_of(x_px, y_px, half)
    light = cut_out(image.data_e, x_px, y_px, half, 0.0).astype(float)
    mask = cut_out(image.mask, x_px, y_px, half, 0)
    ny, nx = image.data_e.shape
    inside = _inside(x_px, y_px, half, nx, ny)
    empty = ~np.isfinite(light) | ~inside
    star = np.where(empty, 0.0, light - sky[:, None, None])
    readout = np.where(empty, 0.0, cut_out(image.variance_e2, x_px, y_px, half, 0.0))
    # The flat raised the light and, by as much more, the noise of its photons.
    per_e = np.ones(1)
    if image.sensitivity is not None:
        per_e = 1.0 / cut_out(image.sensitivity, x_px, y_px, half, 1.0).astype(float)
    hit = _cosmic_rays(star, readout, np.maximum(sky, 0.0), fwhm_px) & inside
    causes = (
        (StarFlag.SATURATED, (mask & PixelFlag.SATURATED) > 0),
        (StarFlag.BAD_PIXEL, ((mask & (PixelFlag.BAD | PixelFlag.NOT_FINITE)) > 0) | (~np.isfinite(light) & inside)),
        (StarFlag.EDGE, ~inside),
        (StarFlag.COSMIC_RAY, hit),
    )
    present = [(flag, where, where.any(axis=(1, 2))) for flag, where in causes]
    for k, radius in enumerate(radii):
        reach = math.ceil(radius + 0.5)
        at = np.s_[:, half - reach : half + reach + 1, half - reach : half + reach + 1]
        part = circle_overlap(dx[:, :, at[2]], dy[:, at[1], :], float(radius))
        for flag, where, any_at_all in present:
            touched = np.flatnonzero(any_at_all)
            struck = (where[at][touched] & (part[touched] > 1e-9)).any(axis=(1, 2))
            rows["flags"][touched[struck], k] |= np.uint32(flag)
        part = np.where(inside[at], part, 0.0)
        square = part**2
        photon_square = square if image.sensitivity is None else square * per_e[at]
        flux = np.einsum("nij,nij->n", part, star[at])
        area = part.sum(axis=(1, 2))
        # Pixels in part inside count with the square of their part: that is how their noise enters the sum.
        photons = np.maximum(np.einsum("nij,nij->n", photon_square, star[at]), 0.0)
        photons += np.maximum(sky, 0.0) * photon_square.sum(axis=(1, 2))
        flat = image.relative_flat_error**2 * np.einsum("nij,nij->n", square, np.where(empty, 0.0, light)[at] ** 2)
        noise = np.einsum("nij,nij->n", square, readout[at])
        rows["flux_e"][:, k], rows["area_px"][:, k] = np.where(np.isfinite(sky), flux, np.nan), area
        rows["flux_err_e"][:, k] = np.sqrt(aperture_variance(photons, noise, area, rows["sky_err_e_px"], flat))
    near = dx**2 + dy**2 <= (PEAK_FWHM * fwhm_px) ** 2
    peak = light / image.gain_e_per_adu if raw_adu is None else cut_out(raw_adu, x_px, y_px, half, 0.0)
    rows["peak_adu"] = np.where(near & ~empty, peak, -np.inf).max(axis=(1, 2))
    rows["fwhm_px"], rows["elongation"] = _shapes(star, dx, dy, fwhm_px, rows)


def _inside(x_px: Floats, y_px: Floats, half: int, nx: int, ny: int) -> NDArray[np.bool_]:
    """Which pixels of the cut-outs lie on the image."""
    offsets = np.arange(-half, half + 1)
    columns, rows = np.rint(x_px)[:, None] + offsets, np.rint(y_px)[:, None] + offsets
    return ((rows >= 0) & (rows < ny))[:, :, None] & ((columns >= 0) & (columns < nx))[:, None, :]


def _cosmic_rays(star: Floats, readout: Floats, sky: Floats, fwhm_px: float) -> NDArray[np.bool_]:
    """Pixels that stand out from their four neighbours more than the centre of the sharpest star could."""
    sigma = SHARPEST * fwhm_px / FWHM_PER_SIGMA
    ratio = math.exp(0.5 / sigma**2)
    around = np.zeros_like(star)
    around[:, 1:-1, 1:-1] = (star[:, :-2, 1:-1] + star[:, 2:, 1:-1] + star[:, 1:-1, :-2] + star[:, 1:-1, 2:]) / 4.0
    around = np.maximum(around, 0.0)
    dark = readout + sky[:, None, None]
    # Noise that a star alone would have here: the pixel's own excess must not raise its own bar.
    noise = np.sqrt(dark + ratio * around + ratio**2 * (dark + around) / 4.0)
    hit = star > ratio * around + COSMIC_SIGMA * noise
    hit[:, [0, -1], :] = hit[:, :, [0, -1]] = False
    return hit


def _shapes(star: Floats, dx: Floats, dy: Floats, fwhm_px: float, rows: NDArray[Any]) -> tuple[Floats, Floats]:
    """FWHM and elongation from second moments under a Gaussian window of the frame's width.

    For Gaussians the inverse covariances of image and window add up, so the window's is taken off again.
    """
    window = (fwhm_px / FWHM_PER_SIGMA) ** 2
    weighted = star * np.exp(-(dx**2 + dy**2) / (2.0 * window))
    with np.errstate(invalid="ignore", divide="ignore"):
        total = weighted.sum(axis=(1, 2))
        mx, my = (weighted * dx).sum(axis=(1, 2)) / total, (weighted * dy).sum(axis=(1, 2)) / total
        xx = (weighted * dx**2).sum(axis=(1, 2)) / total - mx**2
        yy = (weighted * dy**2).sum(axis=(1, 2)) / total - my**2
        xy = (weighted * dx * dy).sum(axis=(1, 2)) / total - mx * my
        det = xx * yy - xy**2
        # Inverse of the image's own covariance.
        a, b, c = yy / det - 1.0 / window, xx / det - 1.0 / window, -xy / det
        middle, spread = (a + b) / 2.0, np.hypot((a - b) / 2.0, c)
        major, minor = 1.0 / (middle - spread), 1.0 / (middle + spread)
        bright = rows["flux_e"][:, 2] > WIDTH_SNR * rows["flux_err_e"][:, 2]
        known = bright & (total > 0) & (det > 0) & (middle > spread)
        fwhm = FWHM_PER_SIGMA * (major * minor) ** 0.25
        elongation = np.sqrt(major / minor)
    return np.where(known, fwhm, np.nan), np.where(known, elongation, np.nan)
