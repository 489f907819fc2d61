"""A target without its host where no reference is at hand: the galaxy turned about its centre is taken off.

What the galaxy and its mirrored image differ by on the rest of the target's isophote is carried as an error that all
nights share.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.forced import forced_flux, ladder
from reduce.measure.host import NO_PIXELS, HostFree
from reduce.measure.host_stamp import (
    HostStamp,
    few,
    host_stamp,
    plain_difference,
    trials,
    without_reference,
    write_flux,
)
from reduce.measure.psf import Psf
from reduce.measure.stamps import StampPack
from reduce.records import Floats

APART_FWHM = 3.0
"""A target and its mirrored place must lie so far apart that the one's light does not reach the other."""
ROUNDS = 6
CLIP_SIGMA = 4.0
LARGEST_SHIFT_FWHM = 1.0
"""Farther than this from the given place the galaxy's centre is not sought."""
FEWEST_PLACES = 4
KNOT_SIGMA = 5.0
LEAST_MISS = 0.06
"""Of the host's light under the target: no galaxy is more symmetric than this (measured on simulated discs with a
twentieth of their light in knots)."""


def mirror_host(
    pack: StampPack, row: NDArray[Any], host_ra: float, host_dec: float, psf: Psf | None = None
) -> HostFree | str:
    """The target's row, measured after the galaxy turned about its centre was taken off.

    Parameters
    ----------
    pack, row
        Stamps of the frame and the target's STAR_DTYPE row.
    host_ra, host_dec
        Centre of the galaxy, degrees; refined on the frame.
    psf
        Of the frame; None: taken from the pack's stars.

    Returns
    -------
    HostFree or str
        A sentence says why it cannot be done.
    """
    field = host_stamp(pack, row, host_ra, host_dec, psf)
    if isinstance(field, str):
        return field
    cut = field.cut
    if 2.0 * field.distance < APART_FWHM * field.fwhm:
        return "The target lies too near to its host's centre for the mirrored host: each covers the other."
    if not field.holds(2 * field.hx - field.x, 2 * field.hy - field.y, 2.0):
        return "The place opposite to the target lies outside its stamp."
    terms, covariance, coefficient = _centre(field)
    opposite = 2 * field.hx - field.x, 2 * field.hy - field.y
    if field.star_near(*opposite):
        return "A star lies opposite to the target in its host."
    turned, there = field.turned()
    light = cut.light_e - turned - np.einsum("k,kij->ij", coefficient[2:], terms[2:])
    good = cut.good & there
    noise = _noise(field, turned)
    d = plain_difference(field, light, good, turned, noise, terms, covariance)
    flux = forced_flux(d)
    if flux is None:
        return NO_PIXELS
    level = _smooth_at(turned, field)
    places = field.places(level)
    knot = _knot(field, opposite, places)
    if knot > KNOT_SIGMA:
        return f"Something compact ({knot:.0f} sigma) lies opposite to the target in its host."
    values, errors = [], []
    for place in places:
        weight = field.weights(*place, good, noise)
        if weight is not None:
            values.append(float((weight * light).sum()))
            errors.append(float(np.sqrt((weight**2 * noise).sum())))
    if len(values) < FEWEST_PLACES:
        return "Too little of the host's isophote lies on the stamp to test the mirrored host."
    # Opposite places carry the same difference with the other sign, so its mean is zero by construction.
    excess = float(np.mean(np.square(values)) - np.mean(np.square(errors)))
    miss = math.sqrt(max(excess, 0.0) * few(len(values) / 2) + (LEAST_MISS * flux.host_e) ** 2)
    new = row.copy()
    write_flux(new, flux)
    ladder(new, d, flux, field.scene.scale_arcsec)
    return without_reference(new, "mirrored", miss, flux)


def _smooth_at(image: Floats, field: HostStamp) -> float:
    """Surface brightness at the target's place, over the width of a star."""
    return float((image * field.shape).sum() / field.shape.sum())


def _noise(field: HostStamp, turned: Floats) -> Floats:
    """Variance of the difference of two places without the target's photons."""
    from scipy.ndimage import uniform_filter

    scene = field.scene
    host = np.maximum(uniform_filter(turned, 3, mode="nearest"), 0.0)
    return np.asarray(2.0 * (scene.readout_e2 + max(scene.sky_e_px, 0.0) + host))


def _centre(field: HostStamp) -> tuple[Floats, Floats, Floats]:
    """Move the centre to where the galaxy is most symmetric.

    Returns the (4, ny, nx) terms (centre along x and y, slope of the sky along x and y), the covariance and the
    coefficients of the last step, of which only the slopes are left to be applied.
    """
    limit = LARGEST_SHIFT_FWHM * field.fwhm
    first = field.hx, field.hy
    coefficient, covariance = np.zeros(4), np.zeros((4, 4))
    terms = np.zeros((4, *field.gx.shape))
    for _ in range(ROUNDS):
        turned, there = field.turned()
        rows, columns = np.gradient(turned)
        # A centre moved by one pixel moves the turned image by two.
        unit = max(field.gx.shape) / 2.0
        terms = np.stack([-2.0 * columns, -2.0 * rows, (field.gx - field.hx) / unit, (field.gy - field.hy) / unit])
        reach = np.hypot(field.gx - field.hx, field.gy - field.hy) < max(1.5 * field.distance, 4.0 * field.fwhm)
        use = field.clear() & there & field.cut.good & reach
        noise = 2.0 * field.cut.variance_e2
        residual = field.cut.light_e - turned
        sigma = np.sqrt(noise + (0.1 * np.maximum(turned, 0.0)) ** 2)
        use &= np.abs(residual) < CLIP_SIGMA * sigma
        if use.sum() < 30:
            break
        design, weight = terms[:, use], 1.0 / sigma[use] ** 2
        normal = (design * weight) @ design.T + 1e-12 * np.eye(4)
        covariance = np.linalg.pinv(normal, hermitian=True)
        coefficient = covariance @ ((design * weight) @ residual[use])
        if math.sqrt(max(covariance[0, 0], covariance[1, 1])) > 0.3 * field.fwhm:
            coefficient[:2], covariance[:2] = 0.0, 0.0
            covariance[:, :2] = 0.0
        field.hx = float(np.clip(field.hx + coefficient[0], first[0] - limit, first[0] + limit))
        field.hy = float(np.clip(field.hy + coefficient[1], first[1] - limit, first[1] + limit))
        if np.hypot(*coefficient[:2]) < 0.005:
            break
    return terms, covariance, coefficient


def _knot(field: HostStamp, place: tuple[float, float], places: list[tuple[float, float]]) -> float:
    """Significance of a point-like excess at a place above what the isophote's other places show."""
    bare = field.cut.light_e
    there, others = trials(field, [place], 0.0, bare), trials(field, places, 0.0, bare)
    if not there or len(others) < FEWEST_PLACES:
        return 0.0
    values = np.array([trial.miss_e for trial in others])
    middle = float(np.median(values))
    scatter = max(1.4826 * float(np.median(np.abs(values - middle))), float(np.median([t.err_e for t in others])))
    return (there[0].miss_e - middle) / math.hypot(there[0].err_e, scatter)
