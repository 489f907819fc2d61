"""Which detection is which catalogue star: triangles of any rotation and either parity, then proof by counting.

Triangles of bright stars are compared by their side ratios (Groth 1986, AJ 91, 1244; Valdes et al. 1995, PASP 107,
1119). Every pair of like triangles names a similarity; true pairs agree on one. The best agreed ones are refined with
all stars, and one is believed only when the catalogue stars that it finds are far more than chance would give.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.field.wcs import fit_solution, project, sky_to_pixel
from reduce.records import Detections, FieldSolution, Floats

DEPTHS = (20, 32, 48)
"""Numbers of bright stars to try; the next one when the one before found nothing."""
RATIO_TOLERANCE = 0.012
"""In side ratios; centroids of bright stars are good to a few hundredths of a pixel, distortion is a little more."""
LEAST_RATIO, MOST_RATIO = 0.15, 0.97
"""Needles say nothing, nearly equal sides are ambiguous."""
CANDIDATES = 40
CELL = 0.04
"""Side of the boxes that similarities are counted in."""
LEAST_STARS = 6
LEAST_STARS_KNOWN_CAMERA = 4
"""When the scale is known to 2 % and the parity too."""
LARGEST_RMS_PX = 1.0
LEAST_RMS_PX = 0.05
STRAY_RATIO = 8.0
"""A pair is a stray when it misses by more than this times the rms of the others: with few stars the extrapolation
alone reaches 4 or 5."""
MOST_TO_LEAVE_OUT = 20
"""In a larger number of pairs a stray of two pixels moves nothing."""
LEAST_REACH_PX = 0.5
CHANCE = 1e-8
CHANCE_KNOWN_CAMERA = 1e-6
"""Probability of as many coincidences, times the number of candidates looked at, that is still believed."""
UNKNOWN_SCALE_ARCSEC = (0.05, 15.0)


@dataclass(frozen=True, slots=True)
class FieldHint:
    """What is known before: where the telescope claims to point, and the camera."""

    ra_deg: float | None = None
    dec_deg: float | None = None
    scale_arcsec: float | None = None
    scale_tolerance: float = 0.2
    mirrored: bool | None = None


@dataclass(frozen=True, slots=True)
class FieldMatch:
    """A believed solution with its star pairs, or None and why."""

    solution: FieldSolution | None
    detected: NDArray[np.int64]
    """(m,) indices into the detections."""
    catalogue: NDArray[np.int64]
    """(m,) indices into the catalogue."""
    reason: str


def _failed(reason: str) -> FieldMatch:
    nothing = np.zeros(0, dtype=np.int64)
    return FieldMatch(None, nothing, nothing, reason)


def match_field(
    detections: Detections,
    ra_deg: Floats,
    dec_deg: Floats,
    mag: Floats,
    hint: FieldHint,
    shape: tuple[int, int],
) -> FieldMatch:
    """Find the field.

    Parameters
    ----------
    detections
        Stars of the frame, brightest first.
    ra_deg, dec_deg, mag
        (n,) catalogue, ICRS; the magnitudes only rank.
    hint
        Limits of the search. The position only chooses which part of a wide catalogue is tried first.
    shape
        (ny, nx) of the frame.
    """
    if len(detections) < 3:
        return _failed(f"only {len(detections)} stars were found on the frame; three are the least to find the field.")
    if len(ra_deg) < 3:
        return _failed("the comparison sequence holds fewer than three stars.")
    search = _Search(detections, np.asarray(ra_deg), np.asarray(dec_deg), np.asarray(mag), hint, shape)
    best_reason = ""
    for part in search.parts():
        for depth in DEPTHS:
            found, reason = search.look(part, depth)
            if found is not None:
                return found
            best_reason = best_reason or reason
            if depth >= max(len(detections), len(part)):
                break
    return _failed(best_reason)


class _Search:
    def __init__(
        self, seen: Detections, ra: Floats, dec: Floats, mag: Floats, hint: FieldHint, shape: tuple[int, int]
    ) -> None:
        self.seen, self.ra, self.dec, self.hint, self.shape = seen, ra, dec, hint, shape
        self.by_mag = np.argsort(np.where(np.isfinite(mag), mag, 99.0), kind="stable")
        self.x, self.y = seen.x_px, seen.y_px
        self.known_camera = hint.scale_arcsec is not None and hint.scale_tolerance <= 0.02 and hint.mirrored is not None

    def parts(self) -> list[NDArray[np.int64]]:
        """Catalogue stars, brightest first: those near the claimed position, then all."""
        everything = self.by_mag
        hint = self.hint
        if hint.ra_deg is None or hint.dec_deg is None or hint.scale_arcsec is None:
            return [everything]
        reach = 0.75 * math.hypot(*self.shape) * hint.scale_arcsec / 3600.0
        xi, eta = project(self.ra[everything], self.dec[everything], hint.ra_deg, hint.dec_deg)
        near = everything[np.hypot(xi, eta) < reach]
        return [near, everything] if 3 <= len(near) < len(everything) else [everything]

    def scale_limits(self) -> tuple[float, float]:
        """Degrees per pixel."""
        if self.hint.scale_arcsec is None:
            low, high = UNKNOWN_SCALE_ARCSEC
        else:
            low = self.hint.scale_arcsec / (1 + self.hint.scale_tolerance)
            high = self.hint.scale_arcsec * (1 + self.hint.scale_tolerance)
        return low / 3600.0, high / 3600.0

    def look(self, part: NDArray[np.int64], depth: int) -> tuple[FieldMatch | None, str]:
        """Try the brightest ``depth`` stars of both lists."""
        stars = part[:depth]
        centre = _middle(self.ra[part], self.dec[part])
        xi, eta = project(self.ra[stars], self.dec[stars], *centre)
        sky = np.where(np.isfinite(xi), xi + 1j * eta, np.inf)
        pixel = (self.x + 1j * self.y)[:depth]
        similarities = []
        for mirrored in (False, True) if self.hint.mirrored is None else (self.hint.mirrored,):
            # A camera that is not mirrored sees east to the left: its sky coordinates are the mirror image.
            flat = pixel if mirrored else pixel.conjugate()
            similarities += _agreed(flat, sky, self.scale_limits(), mirrored)
        similarities.sort(key=lambda s: (-s.votes, s.mirrored, s.turn.real, s.turn.imag))
        tried = similarities[:CANDIDATES]
        for similarity in tried:
            found = self._prove(similarity, part, centre, len(tried))
            if found is not None:
                return found, ""
        n_seen, n_known = len(self.seen), len(part)
        return None, (
            f"the field was not recognised: none of the patterns of {min(n_seen, depth)} bright stars fits the "
            f"comparison sequence ({n_seen} stars on the frame, {n_known} in the sequence)."
        )

    def _prove(
        self, start: _Similarity, part: NDArray[np.int64], centre: tuple[float, float], trials: int
    ) -> FieldMatch | None:
        """Refine with all stars and count; None when chance could do as well."""
        ny, nx = self.shape
        xi, eta = project(self.ra[part], self.dec[part], *centre)
        flat = (xi + 1j * eta - start.shift) / start.turn
        x, y = flat.real, flat.imag if start.mirrored else -flat.imag
        solution = None
        pairs = (np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64))
        for tolerance in (6.0, 4.0, 3.0, 2.0, 2.0, None):
            # The last fit is without the pairs that are only near each other by chance.
            pairs = self._pairs(x, y, part, tolerance) if tolerance else self._without_strays(*pairs)
            if len(pairs[0]) < 3:
                return None
            try:
                solution = fit_solution(
                    self.x[pairs[0]], self.y[pairs[0]], self.ra[pairs[1]], self.dec[pairs[1]],
                    ((nx - 1) / 2, (ny - 1) / 2),
                )  # fmt: skip
            except ValueError:
                return None
            x, y = sky_to_pixel(solution, self.ra[part], self.dec[part])
        assert solution is not None
        if not self._sane(solution):
            return None
        within = (x > 0) & (x < nx - 1) & (y > 0) & (y < ny - 1)
        n_expected, n_found = int(within.sum()), len(pairs[0])
        least = LEAST_STARS_KNOWN_CAMERA if self.known_camera else min(LEAST_STARS, max(n_expected, 5))
        if n_found < least:
            return None
        # Coincidences do not fall as close together as true pairs do: few stars suffice when they fit well.
        reach = min(max(3.0 * solution.rms_px, LEAST_REACH_PX), 2.0)
        # A transformation takes three pairs, a known scale leaves two.
        spent, limit = (2, CHANCE_KNOWN_CAMERA) if self.known_camera else (3, CHANCE)
        if _chance(n_found - spent, n_expected - spent, len(self.seen), nx * ny, reach) * trials > limit:
            return None
        return FieldMatch(solution, pairs[0], pairs[1], "")

    def _pairs(
        self, x: Floats, y: Floats, part: NDArray[np.int64], tolerance: float
    ) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Detections and catalogue stars that are each other's nearest within the tolerance."""
        from scipy.spatial import cKDTree

        usable = np.isfinite(x) & np.isfinite(y)
        if not usable.any():
            return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
        places = np.column_stack([x[usable], y[usable]])
        spots = np.column_stack([self.x, self.y])
        far, to = cKDTree(spots).query(places, distance_upper_bound=tolerance)
        distance, nearest = np.asarray(far), np.asarray(to)
        back = np.asarray(cKDTree(places).query(spots)[1])
        ok = np.isfinite(distance)
        index = np.flatnonzero(ok)
        mutual = back[nearest[ok]] == index
        return nearest[ok][mutual].astype(np.int64), part[usable][index[mutual]]

    def _without_strays(
        self, detected: NDArray[np.int64], catalogue: NDArray[np.int64]
    ) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Pairs without those whose residual, to a solution of all the others, is far beyond the others' own."""
        ny, nx = self.shape
        while len(detected) > LEAST_STARS:
            worst, worst_ratio = -1, STRAY_RATIO
            for k in range(len(detected)) if len(detected) <= MOST_TO_LEAVE_OUT else ():
                seen, known = np.delete(detected, k), np.delete(catalogue, k)
                try:
                    rest = fit_solution(
                        self.x[seen], self.y[seen], self.ra[known], self.dec[known], ((nx - 1) / 2, (ny - 1) / 2)
                    )
                except ValueError:
                    continue
                x, y = sky_to_pixel(rest, self.ra[catalogue[k]], self.dec[catalogue[k]])
                miss = math.hypot(float(x) - self.x[detected[k]], float(y) - self.y[detected[k]])
                ratio = miss / max(rest.rms_px, LEAST_RMS_PX)
                if ratio > worst_ratio:
                    worst, worst_ratio = k, ratio
            if worst < 0:
                break
            detected, catalogue = np.delete(detected, worst), np.delete(catalogue, worst)
        return detected, catalogue

    def _sane(self, solution: FieldSolution) -> bool:
        """Scale and parity as allowed, square pixels, small residuals."""
        low, high = self.scale_limits()
        (a, b), (c, d) = solution.cd_deg
        singular = np.linalg.svd(np.array([[a, b], [c, d]]), compute_uv=False)
        square = singular[0] / max(singular[1], 1e-30) < 1.03
        scale_ok = low * 0.99 <= solution.scale_arcsec / 3600.0 <= high * 1.01
        parity_ok = self.hint.mirrored is None or solution.mirrored == self.hint.mirrored
        return bool(square and scale_ok and parity_ok and solution.rms_px < LARGEST_RMS_PX)


@dataclass(frozen=True, slots=True)
class _Similarity:
    """sky = turn · flat + shift, in the complex plane of standard coordinates."""

    turn: complex
    shift: complex
    mirrored: bool
    votes: int


def _triangles(points: NDArray[np.complex128]) -> tuple[NDArray[np.int64], Floats, Floats]:
    """Vertices (t, 3) in the order (a-b, b-c, c-a longest first), side ratios (t, 2), longest sides (t,)."""
    index = np.array(list(combinations(range(len(points)), 3)), dtype=np.int64)
    if len(index) == 0:
        return np.zeros((0, 3), dtype=np.int64), np.zeros((0, 2)), np.zeros(0)
    p = points[index]
    # Side k lies opposite to vertex k.
    sides = np.abs(np.stack([p[:, 1] - p[:, 2], p[:, 2] - p[:, 0], p[:, 0] - p[:, 1]], axis=1))
    order = np.argsort(-sides, axis=1, kind="stable")
    index = np.take_along_axis(index, order, axis=1)
    sides = np.take_along_axis(sides, order, axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratios = sides[:, 1:] / sides[:, :1]
    usable = (
        np.isfinite(ratios).all(axis=1)
        & (ratios[:, 1] > LEAST_RATIO)
        & (ratios[:, 0] < MOST_RATIO)
        & (ratios[:, 1] < MOST_RATIO * ratios[:, 0])
    )
    return index[usable], ratios[usable], sides[usable, 0]


def _agreed(
    flat: NDArray[np.complex128], sky: NDArray[np.complex128], limits: tuple[float, float], mirrored: bool
) -> list[_Similarity]:
    """Similarities that pairs of like triangles agree on, with the number of those pairs."""
    from scipy.spatial import cKDTree

    sky = sky[np.isfinite(sky)]
    near, near_ratios, near_size = _triangles(flat)
    far, far_ratios, far_size = _triangles(sky)
    if len(near) == 0 or len(far) == 0:
        return []
    hits: Any = cKDTree(far_ratios).query_ball_point(near_ratios, RATIO_TOLERANCE, return_sorted=True)
    counts = np.array([len(hit) for hit in hits])
    first = np.repeat(np.arange(len(near)), counts)
    second = np.concatenate([np.asarray(hit, dtype=np.int64) for hit in hits]) if counts.sum() else first
    scale = far_size[second] / near_size[first]
    keep = (scale > limits[0]) & (scale < limits[1])
    first, second = first[keep], second[keep]
    p, q = flat[near[first]], sky[far[second]]
    turn = (q[:, 2] - q[:, 1]) / (p[:, 2] - p[:, 1])
    # Ratios are blind to handedness: the third vertex must fall where the other two say.
    shift = q[:, 1] - turn * p[:, 1]
    miss = np.abs(turn * p[:, 0] + shift - q[:, 0]) / np.abs(q[:, 2] - q[:, 1])
    good = miss < 3 * RATIO_TOLERANCE
    turn, shift = turn[good], shift[good]
    if len(turn) == 0:
        return []
    return _clusters(turn, shift, flat, mirrored)


def _clusters(
    turn: NDArray[np.complex128], shift: NDArray[np.complex128], flat: NDArray[np.complex128], mirrored: bool
) -> list[_Similarity]:
    """Group similarities by where they put the middle of the frame, by scale and by rotation."""
    middle = flat.mean()
    width = max(float(np.abs(flat - middle).max()), 1.0)
    size = np.abs(turn)
    place = (turn * middle + shift) / np.median(size) / width
    # One unit of each coordinate moves a star at the edge by one field radius.
    features = np.column_stack([place.real, place.imag, np.log(size), (turn / size).real, (turn / size).imag])
    _, member, count = np.unique(
        np.floor(features / CELL).astype(np.int64), axis=0, return_inverse=True, return_counts=True
    )
    member = member.reshape(-1)
    found: list[_Similarity] = []
    free = np.ones(len(turn), bool)
    for cell in np.argsort(-count, kind="stable")[: 2 * CANDIDATES]:
        inside = free & (member == cell)
        if not inside.any():
            continue
        near = free & (np.abs(features - np.median(features[inside], axis=0)).max(axis=1) < CELL)
        free &= ~near
        t = complex(np.median(turn[near].real), np.median(turn[near].imag))
        centre = turn[near] * middle + shift[near]
        c = complex(np.median(centre.real), np.median(centre.imag))
        found.append(_Similarity(t, c - t * middle, mirrored, int(near.sum())))
        if len(found) >= CANDIDATES:
            break
    return found


def _chance(n_found: int, n_expected: int, n_seen: int, area_px: float, radius_px: float) -> float:
    """Probability that at least ``n_found`` of ``n_expected`` places hold one of the detections by chance."""
    from scipy.stats import binom

    p = 1.0 - math.exp(-n_seen * math.pi * radius_px**2 / area_px)
    return float(binom.sf(n_found - 1, max(n_expected, 1), min(max(p, 1e-12), 1.0)))


def _middle(ra_deg: Floats, dec_deg: Floats) -> tuple[float, float]:
    x = np.cos(np.radians(dec_deg)) * np.exp(1j * np.radians(ra_deg))
    z = np.sin(np.radians(dec_deg)).mean()
    mean = x.mean()
    return float(np.degrees(np.angle(mean)) % 360.0), float(np.degrees(np.arctan2(z, abs(mean))))
