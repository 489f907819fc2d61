"""The point-spread function of one frame: an elliptical Moffat profile and a table of what it misses.

The function is an effective one (Anderson & King 2000, PASP 112, 1360): light per pixel as a smooth function of the
pixel's offset from the star. The table is a sum of radial splines times angular harmonics, held towards zero where the
stars are too few or too faint to tell. Its zero is where the stars' given positions are.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.moffat import MoffatField, fit_moffat, profile, total
from reduce.measure.stamps import StampPack, target_half_px
from reduce.records import CalibratedImage, Floats, StarFlag
from reduce.stars.stamps import cut_out, offsets_of

WHOLE_FWHM = 4.0
"""All light is what falls within this radius, as through the largest aperture of the ladder."""
CORE_FWHM = 2.0
"""The Moffat profile is fitted within this radius."""
MOST_STARS, FEWEST_STARS = 40, 2
LEAST_SNR, FEWEST_BRIGHT, POOREST_SNR = 30.0, 5, 10.0
"""Stars below LEAST_SNR are only taken where fewer than FEWEST_BRIGHT are above."""
ISOLATED_FWHM, CROWDED_FWHM = 6.0, 2.5
"""No other star within the first, or where that leaves too few, within the second."""
NEIGHBOUR_FWHM = 2.5
"""Pixels so near to another star do not count."""
TABLE_PER_FWHM = 8
KNOTS_FWHM = (0.0, 0.3, 0.6, 0.9, 1.25, 1.7, 2.3, 3.1, 4.2)
HARMONICS = 4
INNER_SPLINES = 8
"""Harmonics have so many splines, those near the star; the round part has all."""
TABLE_ERR = 0.03
"""How far the Moffat profile is expected to be off, in units of its local height, before any star is seen."""
WING_ERR = 0.01
"""The same of the wings, in units of the star's height at one FWHM, falling with the square of the radius."""
CLIP_SIGMA, CLIP_LIGHT = 4.0, 0.15
FINE_PX = 4.0
"""From this FWHM on the differences between pixels tell the slope of a profile."""
SLOPE_STEP_PX = 0.2
ROUNDS = 3


@dataclass(frozen=True, slots=True)
class PsfStars:
    """Square cut-outs of isolated stars, centred on the pixel nearest to each."""

    x_px: Floats
    y_px: Floats
    light_e: Floats
    """(n, s, s) without sky."""
    variance_e2: Floats
    """(n, s, s) with the photons of the sky, without the star's."""
    usable: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.x_px)


@dataclass(frozen=True, slots=True)
class Psf:
    """Light per pixel of a unit star; 1 is all the light within 4 FWHM."""

    fwhm_px: float
    moffat: MoffatField
    table: Floats
    """(m, m) spline coefficients of what is added to a Moffat profile of height 1, TABLE_PER_FWHM nodes a FWHM."""
    share: float
    """Light within 4 FWHM of the Moffat profile alone over that with the table."""
    shift_px: tuple[float, float]
    """Of the profile's centre from where the stars' positions are said to be."""
    n_stars: int

    def light(self, dx: Floats, dy: Floats, x_px: Floats, y_px: Floats) -> Floats:
        """Profiles of many stars, (n, s, s).

        Parameters
        ----------
        dx, dy
            (n, 1, s) and (n, s, 1) offsets of pixel centres from the stars.
        x_px, y_px
            (n,) where on the frame the stars are.
        """
        dx, dy = dx - self.shift_px[0], dy - self.shift_px[1]
        quadratic = self.moffat.quadratic(x_px, y_px)
        height = profile(dx, dy, quadratic, self.moffat.inv_beta, self.fwhm_px)
        height = height + _look_up(self.table, dx, dy, self.fwhm_px)
        return height * (self.share / self._whole(quadratic))[:, None, None]

    def _whole(self, quadratic: Floats) -> Floats:
        """Light within 4 FWHM of each place: a wider image is given a wider aperture, else it would look fainter."""
        mean = self.moffat.coefficients[:, 0][None, :]
        area = np.sqrt(quadratic[:, 0] * quadratic[:, 2] - quadratic[:, 1] ** 2)
        usual = np.sqrt(mean[:, 0] * mean[:, 2] - mean[:, 1] ** 2)
        return total(mean, self.moffat.inv_beta, WHOLE_FWHM * self.fwhm_px) * (usual / area)

    def slopes(self, light: Floats, dx: Floats, dy: Floats, x_px: Floats, y_px: Floats) -> tuple[Floats, Floats]:
        """Change of ``light`` = `light` (dx, dy, x_px, y_px) per pixel along x and along y, each (n, s, s).

        From the pixels themselves where they are fine enough, else from profiles a little to either side.
        """
        if self.fwhm_px >= FINE_PX:
            return np.asarray(np.gradient(light, axis=2)), np.asarray(np.gradient(light, axis=1))
        step = SLOPE_STEP_PX
        along_x = self.light(dx + step, dy, x_px, y_px) - self.light(dx - step, dy, x_px, y_px)
        along_y = self.light(dx, dy + step, x_px, y_px) - self.light(dx, dy - step, x_px, y_px)
        return along_x / (2.0 * step), along_y / (2.0 * step)

    def at(self, x_px: float, y_px: float, x0: int, y0: int, shape: tuple[int, int]) -> Floats:
        """Light per pixel of a unit star at (x_px, y_px) in the window of ``shape`` whose first pixel is (x0, y0)."""
        dx: Floats = np.arange(x0, x0 + shape[1], dtype=float)[None, None, :] - x_px
        dy: Floats = np.arange(y0, y0 + shape[0], dtype=float)[None, :, None] - y_px
        return np.asarray(self.light(dx, dy, np.array([x_px]), np.array([y_px]))[0])


def _look_up(table: Floats, dx: Floats, dy: Floats, fwhm_px: float) -> Floats:
    from scipy.ndimage import map_coordinates

    half = (len(table) - 1) // 2
    per_px = TABLE_PER_FWHM / fwhm_px
    dx, dy = np.broadcast_arrays(dx, dy)
    near = (np.abs(dx) < WHOLE_FWHM * fwhm_px) & (np.abs(dy) < WHOLE_FWHM * fwhm_px)
    found = np.zeros(dx.shape)
    at = np.stack([dy[near] * per_px + half, dx[near] * per_px + half])
    found[near] = map_coordinates(table, at, order=3, mode="constant", prefilter=False)
    return found


def frame_psf(
    image: CalibratedImage, table: NDArray[Any], neighbours_xy: Floats, fwhm_px: float, scale_arcsec: float
) -> Psf | None:
    """The point-spread function of a frame from its measured stars.

    Parameters
    ----------
    table
        STAR_DTYPE rows; field stars without a flag at 1.5 FWHM are used, the brightest 40.
    neighbours_xy
        (m, 2) positions of all stars of the frame, the measured ones included or not.
    scale_arcsec
        Of one pixel; with the seeing it says how far from a target its galaxy may reach.
    """
    if not math.isfinite(fwhm_px):
        return None
    k = 4  # 1.5 FWHM
    flux, flux_err = table["flux_e"][:, k], table["flux_err_e"][:, k]
    snr = np.nan_to_num(flux / np.where(flux_err > 0, flux_err, np.inf))
    clean = (table["role"] == 0) & (table["flags"][:, k] & ~np.uint32(StarFlag.CROWDED) == 0)
    clean &= np.isfinite(table["sky_e_px"])
    places = np.column_stack([table["x_px"], table["y_px"]])
    on_target = _near_target(places, places[table["role"] == 1], target_half_px(fwhm_px, scale_arcsec))
    rows = _fit_to_shape(places, np.where(clean, flux, np.nan), snr, on_target, neighbours_xy, fwhm_px)
    chosen = table[rows]
    x_px, y_px, sky = chosen["x_px"], chosen["y_px"], chosen["sky_e_px"]
    half = math.ceil(WHOLE_FWHM * fwhm_px)
    data = cut_out(image.data_e, x_px, y_px, half, np.nan).astype(float)
    readout = cut_out(image.variance_e2, x_px, y_px, half, np.nan).astype(float)
    usable = np.isfinite(data) & np.isfinite(readout) & (cut_out(image.mask, x_px, y_px, half, 255) == 0)
    _leave_out_neighbours(usable, x_px, y_px, neighbours_xy, fwhm_px)
    light, variance = _without_sky(data, readout, sky, usable)
    return build_psf(PsfStars(x_px, y_px, light, variance, usable), fwhm_px)


def _without_sky(data: Floats, readout: Floats, sky: Floats, usable: NDArray[np.bool_]) -> tuple[Floats, Floats]:
    level = sky[:, None, None]
    return np.where(usable, data - level, 0.0), np.where(usable, readout + np.maximum(level, 0.0), 1.0)


def _leave_out_neighbours(
    usable: NDArray[np.bool_], x_px: Floats, y_px: Floats, neighbours_xy: Floats, fwhm_px: float
) -> None:
    """Pixels of (n, s, s) cut-outs that belong to another star, in place."""
    half = (usable.shape[1] - 1) // 2
    dx, dy = offsets_of(x_px, y_px, half)
    apart = np.hypot(neighbours_xy[None, :, 0] - x_px[:, None], neighbours_xy[None, :, 1] - y_px[:, None])
    for k, j in zip(*np.nonzero((apart > fwhm_px) & (apart < 1.5 * half + NEIGHBOUR_FWHM * fwhm_px)), strict=True):
        off_x, off_y = dx[k] - (neighbours_xy[j, 0] - x_px[k]), dy[k] - (neighbours_xy[j, 1] - y_px[k])
        usable[k] &= off_x**2 + off_y**2 > (NEIGHBOUR_FWHM * fwhm_px) ** 2


def _near_target(places: Floats, targets: Floats, half_px: float) -> NDArray[np.bool_]:
    """(n,) whether a place lies on the stamp of one of the (m, 2) targets."""
    apart = np.abs(places[:, None, :] - targets[None, :, :]).max(axis=2)
    return np.asarray((apart <= half_px).any(axis=1))


def _fit_to_shape(
    places: Floats, flux: Floats, snr: Floats, on_target: NDArray[np.bool_], neighbours_xy: Floats, fwhm_px: float
) -> NDArray[np.int64]:
    """Stars that show the shape, brightest first; flux NaN: not to be used.

    Close to a target, knots and core of its galaxy pass for stars: they are only taken where all others are too few.
    """
    apart = np.hypot(*(neighbours_xy[None, :, :] - places[:, None, :]).transpose(2, 0, 1))
    nearest = np.where(apart > fwhm_px, apart, np.inf).min(axis=1, initial=np.inf)
    order: NDArray[np.int64] = np.argsort(-flux, kind="stable")
    found = order[:0]
    for allowed in (~on_target, np.ones(len(flux), bool)):
        for least, distance in ((LEAST_SNR, ISOLATED_FWHM), (LEAST_SNR, CROWDED_FWHM), (POOREST_SNR, CROWDED_FWHM)):
            good = allowed & np.isfinite(flux) & (snr > least) & (nearest > distance * fwhm_px)
            found = np.asarray(order[good[order]][:MOST_STARS], np.int64)
            if len(found) >= FEWEST_BRIGHT:
                return found
    return found


def stamp_psf(pack: StampPack) -> Psf | None:
    """The point-spread function of a frame from the stamps of its stars, chosen as for `frame_psf`."""
    fwhm_px = pack.fwhm_px
    stars = [stamp for stamp in pack.stamps if not stamp.target and math.isfinite(stamp.sky_e_px)]
    half = math.ceil(WHOLE_FWHM * fwhm_px)
    side = 2 * half + 1
    n = len(stars)
    data, readout = np.zeros((n, side, side)), np.ones((n, side, side))
    usable = np.zeros((n, side, side), bool)
    for k, stamp in enumerate(stars):
        left, low = round(stamp.x_px) - half - stamp.x0, round(stamp.y_px) - half - stamp.y0
        ny, nx = stamp.data_e.shape
        x_from, x_to, y_from, y_to = max(left, 0), min(left + side, nx), max(low, 0), min(low + side, ny)
        if x_to <= x_from or y_to <= y_from:
            continue
        there = np.s_[y_from:y_to, x_from:x_to]
        here = np.s_[k, y_from - low : y_to - low, x_from - left : x_to - left]
        data[here], readout[here] = stamp.data_e[there], stamp.variance_e2[there]
        usable[here] = (stamp.mask[there] == 0) & np.isfinite(data[here]) & np.isfinite(readout[here])
    if n == 0:
        return None
    sky = np.array([stamp.sky_e_px for stamp in stars])
    light, variance = _without_sky(data, readout, sky, usable)
    places = np.array([[stamp.x_px, stamp.y_px] for stamp in stars])
    targets = np.array([[stamp.x_px, stamp.y_px] for stamp in pack.stamps if stamp.target]).reshape(-1, 2)
    dx, dy = offsets_of(places[:, 0], places[:, 1], half)
    inner = dx**2 + dy**2 <= (1.5 * fwhm_px) ** 2
    core = dx**2 + dy**2 <= fwhm_px**2
    flux = np.where(inner, light, 0.0).sum((1, 2))
    noise2 = np.where(inner, variance + np.maximum(light, 0.0), 0.0).sum((1, 2))
    whole = (usable | ~core).all((1, 2))
    on_target = _near_target(places, targets, target_half_px(fwhm_px, pack.scale_arcsec))
    neighbours = np.vstack([places, targets])
    snr = flux / np.sqrt(np.maximum(noise2, 1e-300))
    chosen = _fit_to_shape(places, np.where(whole, flux, np.nan), snr, on_target, neighbours, fwhm_px)
    x_px, y_px, usable = places[chosen, 0], places[chosen, 1], usable[chosen]
    _leave_out_neighbours(usable, x_px, y_px, neighbours, fwhm_px)
    return build_psf(PsfStars(x_px, y_px, light[chosen], variance[chosen], usable), fwhm_px)


def build_psf(stars: PsfStars, fwhm_px: float) -> Psf | None:
    """The point-spread function that the stars share, or None where fewer than two tell one.

    Parameters
    ----------
    stars
        Cut-outs that reach 4 FWHM (smaller ones leave the wings to the Moffat profile).
    fwhm_px
        Of the frame; 1.5 px and more.
    """
    if len(stars) < FEWEST_STARS or not math.isfinite(fwhm_px):
        return None
    half = (stars.light_e.shape[1] - 1) // 2
    dx, dy = offsets_of(stars.x_px, stars.y_px, half)
    reach = min(math.ceil(CORE_FWHM * fwhm_px), half)
    at = np.s_[:, half - reach : half + reach + 1, half - reach : half + reach + 1]
    n = len(stars)
    core_dx, core_dy = np.broadcast_arrays(dx[:, :, at[2]], dy[:, at[1], :])
    round_core = core_dx**2 + core_dy**2 <= (CORE_FWHM * fwhm_px) ** 2
    fitted = fit_moffat(
        stars.light_e[at].reshape(n, -1), stars.variance_e2[at].reshape(n, -1),
        (stars.usable[at] & round_core).reshape(n, -1), core_dx.reshape(n, -1), core_dy.reshape(n, -1),
        stars.x_px, stars.y_px, fwhm_px,
    )  # fmt: skip
    if fitted is None:
        return None
    moffat, own = fitted
    good = own.good
    if good.sum() < FEWEST_STARS:
        return None
    dx, dy = dx[good] - own.x_shift_px[good][:, None, None], dy[good] - own.y_shift_px[good][:, None, None]
    shape = profile(dx, dy, moffat.quadratic(stars.x_px[good], stars.y_px[good]), moffat.inv_beta, fwhm_px)
    basis, prior = _basis(moffat, fwhm_px)
    table = _fit_table(
        stars.light_e[good], stars.variance_e2[good], stars.usable[good], dx, dy,
        shape, own.height[good], basis, prior, fwhm_px,
    )  # fmt: skip
    from scipy.ndimage import spline_filter

    mean = moffat.coefficients[:, 0][None, :]
    half_table = len(table) // 2
    across: Floats = np.arange(-half_table, half_table + 1, dtype=float) * (fwhm_px / TABLE_PER_FWHM)
    height = profile(across[None, None, :], across[None, :, None], mean, moffat.inv_beta, fwhm_px)[0] + table
    inside = across[None, :] ** 2 + across[:, None] ** 2 <= (WHOLE_FWHM * fwhm_px) ** 2
    whole = float(height[inside].sum()) * (fwhm_px / TABLE_PER_FWHM) ** 2
    alone = float(total(mean, moffat.inv_beta, WHOLE_FWHM * fwhm_px)[0])
    if not whole > 0:
        return None
    # The stars' own noise moved them; what they share is kept: positions given elsewhere mean the same place.
    shift = (float(np.median(own.x_shift_px[good])), float(np.median(own.y_shift_px[good])))
    return Psf(fwhm_px, moffat, np.asarray(spline_filter(table, order=3)), alone / whole, shift, int(good.sum()))


def _basis(moffat: MoffatField, fwhm_px: float) -> tuple[Floats, Floats]:
    """(k, m, m) radial splines times harmonics, round where the Moffat profile is, and the (k,) prior errors."""
    from scipy.interpolate import BSpline

    a, b, c = moffat.coefficients[:, 0]
    half = math.ceil((WHOLE_FWHM + 0.25) * TABLE_PER_FWHM)
    nodes = np.arange(-half, half + 1) * (fwhm_px / TABLE_PER_FWHM)
    x, y = nodes[None, :], nodes[:, None]
    # Coordinates in which the mean shape is a circle of FWHM 1: the upper Cholesky factor of its matrix.
    u = math.sqrt(a) * x + b / math.sqrt(a) * y
    v = math.sqrt(c - b * b / a) * y + 0.0 * x
    radius, angle = np.hypot(u, v), np.arctan2(v, u)
    knots = np.concatenate([[0.0] * 3, KNOTS_FWHM, [KNOTS_FWHM[-1]] * 3])
    count = len(knots) - 4
    inside = radius < KNOTS_FWHM[-1]
    splines = np.zeros((count, *radius.shape))
    splines[:, inside] = BSpline.design_matrix(radius[inside], knots, 3).toarray().T
    where = np.array([knots[j + 1 : j + 4].mean() for j in range(count)])
    height = (1.0 + 4.0 * (2.0**moffat.inv_beta - 1.0) * where**2) ** (-1.0 / moffat.inv_beta)
    expected = np.maximum(height * TABLE_ERR, WING_ERR / np.maximum(where, 1.0) ** 2)
    columns, prior = [*splines[:count]], [*expected]
    for m in range(1, HARMONICS + 1):
        fade = (radius**2 / (radius**2 + 0.3**2)) ** (m / 2.0)
        for wave in (np.cos(m * angle), np.sin(m * angle)):
            columns += [splines[j] * fade * wave for j in range(INNER_SPLINES)]
            prior += [expected[j] / m for j in range(INNER_SPLINES)]
    return np.array(columns), np.array(prior)


def _fit_table(
    light: Floats,
    variance: Floats,
    usable: NDArray[np.bool_],
    dx: Floats,
    dy: Floats,
    shape: Floats,
    height: Floats,
    basis: Floats,
    prior: Floats,
    fwhm_px: float,
) -> Floats:
    """(m, m) what the stars have beyond the Moffat profile, of height 1, about its centre."""
    half = (basis.shape[1] - 1) // 2
    per_px = TABLE_PER_FWHM / fwhm_px
    dx, dy = np.broadcast_arrays(dx, dy)
    column, row = np.rint(dx * per_px).astype(int) + half, np.rint(dy * per_px).astype(int) + half
    near = (np.abs(column - half) <= half) & (np.abs(row - half) <= half) & usable
    near &= dx**2 + dy**2 <= (WHOLE_FWHM * fwhm_px) ** 2
    node = np.where(near, row * (2 * half + 1) + column, 0)
    core = dx**2 + dy**2 <= (CORE_FWHM * fwhm_px) ** 2
    table = np.zeros((2 * half + 1, 2 * half + 1))
    size = table.size
    flat = basis.reshape(len(basis), -1)
    model = shape
    for _ in range(ROUNDS):
        glow = np.maximum(height, 0.0)[:, None, None] * np.maximum(model, 0.0)
        noise = variance + glow
        residual = light - height[:, None, None] * model
        keep = near & (residual**2 <= CLIP_SIGMA**2 * noise + (CLIP_LIGHT * glow) ** 2)
        weight = np.where(keep, 1.0 / (noise + (0.02 * glow) ** 2), 0.0)
        inner = np.where(core, weight, 0.0)
        height = (inner * light * model).sum((1, 2)) / np.maximum((inner * model**2).sum((1, 2)), 1e-300)
        excess = (light - height[:, None, None] * shape) / height[:, None, None]
        weight = weight * height[:, None, None] ** 2
        sums = np.bincount(node[keep], weight[keep], size)
        means = np.bincount(node[keep], (weight * excess)[keep], size)
        seen = sums > 0
        columns = flat[:, seen]
        normal = np.einsum("ip,jp->ij", columns * sums[seen], columns)
        normal[np.diag_indices_from(normal)] += prior**-2
        found = np.linalg.solve(normal, np.einsum("ip,p->i", columns, means[seen]))
        table = np.einsum("k,kp->p", found, flat).reshape(table.shape)
        model = shape + np.where(near, table.ravel()[node], 0.0)
    return table
