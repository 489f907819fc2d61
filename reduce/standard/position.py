"""Zero points that depend on the place on the frame: planes, taken only where the residuals demand them.

Two causes, one form ``zp(u, v) = zp + b u + c v`` (u, v: offsets from the frame's centre in half frames):

of the season
    A flat field lit another way than the sky, scattered light, an image that spreads towards one side: the same on
    all frames of a camera and band, or of each side of the pier. A star then steps at every meridian flip. Candidates
    are no plane, one for all frames, one for each orientation of the camera (`sides`); the smallest BIC (Schwarz 1978)
    wins. Star offsets are solved with the planes and held by the catalogue's errors, so a plane that only the
    catalogue shows must be larger than these errors allow.
of one frame
    Thin cloud, dew, a focus that tilts: a plane through that frame's own residuals.

Magnitudes through a small aperture hold less of the light where images are wider: the planes are fitted to magnitudes
through the very radius that is used and so hold that radius' aperture correction over the field, to first order.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.records import Floats
from reduce.standard.scatter import additive_floor
from reduce.standard.zeropoint import JointSolution, Linear, least_squares

SAME_SIDE_DEG = 20.0
"""Frames whose rotation differs by less belong together."""
LEAST_STARS = 6
"""Fewer say nothing of a season's plane."""
LEAST_STARS_OF_FRAME = 8
CLIP_SIGMA = 4.0
LEAST_SPREAD = 0.05
"""Half frames; stars on a narrower strip or spot do not tell a plane."""


@dataclass(frozen=True, slots=True)
class Planes:
    """One plane a frame; F frames."""

    slope_mag: Floats
    """(F, 2) b and c."""
    covariance: Floats
    """(F, 2, 2)."""
    of_frame_mag: Floats
    """(F,) how much the frame's own plane changes from one side of the frame to the other; 0 without one."""
    season: str = ""
    """What was found for the season, in words; empty: nothing."""

    def at(self, place: Floats) -> Floats:
        """(F, S) mag to add to the zero point at places (F, S, 2); 0 at an unknown place."""
        value: Floats = np.einsum("fk,fsk->fs", self.slope_mag, np.nan_to_num(place))
        return value

    def err_at(self, frame: int, place: Floats, stars: Floats) -> Floats:
        """(T,) error of the plane at places (T, 2) of one frame, whose zero point is that of ``stars`` (S, 2)."""
        away = np.nan_to_num(place) - (stars.mean(axis=0) if len(stars) else 0.0)
        err: Floats = np.sqrt(np.maximum(np.einsum("tk,kl,tl->t", away, self.covariance[frame], away), 0.0))
        return err

    @property
    def flat(self) -> bool:
        """True when no frame has a plane."""
        return not self.slope_mag.any()


def no_planes(n_frames: int) -> Planes:
    """The zero point is the same everywhere."""
    return Planes(np.zeros((n_frames, 2)), np.zeros((n_frames, 2, 2)), np.zeros(n_frames))


def sides(rotation_deg: Floats, mirrored: NDArray[np.bool_]) -> NDArray[np.int64]:
    """(F,) number of the orientation of each frame: parity, and rotation within 20° of its neighbours."""
    side = np.zeros(len(rotation_deg), dtype=np.int64)
    count = 0
    for parity in (False, True):
        mine = np.flatnonzero(mirrored == parity)
        if len(mine) == 0:
            continue
        angle = np.mod(rotation_deg[mine], 360.0)
        order = np.argsort(angle, kind="stable")
        gap = np.diff(angle[order], prepend=angle[order[-1]] - 360.0) > SAME_SIDE_DEG
        if gap.any():
            first = int(np.argmax(gap))
            order, gap = np.roll(order, -first), np.roll(gap, -first)
            gap[0] = False
        number = np.cumsum(gap)
        side[mine[order]] = count + number
        count += int(number[-1]) + 1
    return side


def season_planes(
    offset: Floats,
    err: Floats,
    catalogue_err: Floats,
    colour: Floats,
    joint: JointSolution,
    informs: NDArray[np.bool_],
    place: Floats,
    side: NDArray[np.int64],
) -> Planes:
    """Planes that all residuals together demand; `no_planes` when they demand none.

    Parameters
    ----------
    offset, err, catalogue_err, colour, informs
        As given to `solve_zero_points`.
    joint
        Its answer without planes.
    place
        (F, S, 2) of the stars, NaN where not measured.
    side
        (F,) from `sides`.
    """
    n_frames = len(offset)
    standing = np.isfinite(offset) & (err > 0) & np.isfinite(place).all(axis=2) & informs[:, None]
    standing[:, list(joint.set_aside)] = False
    # Measurements that nothing explains stay out; those that a plane may explain must not.
    standing &= np.abs(np.nan_to_num(joint.residual)) < _widest(joint.residual, standing)
    groups = _candidates(standing, place, side)
    if standing.any(axis=0).sum() < LEAST_STARS or len(groups) == 1:
        return no_planes(n_frames)
    term = None if joint.term_fitted else joint.term
    y, u = np.where(standing, offset, 0.0), np.nan_to_num(place)
    prior = np.maximum(catalogue_err, 1e-4) ** -2

    def fit(members: list[list[int]], floor: float, prior: Floats) -> tuple[Linear, Floats, float]:
        patterns = [np.where(np.isin(side, m)[:, None], u[:, :, k], 0.0) for m in members for k in (0, 1)]
        weight = np.where(standing, 1.0 / (np.where(standing, err, 1.0) ** 2 + floor**2), 0.0)
        answer = least_squares(y, weight, colour, prior, informs, term, patterns)
        rest = y - np.nan_to_num(answer.zp)[:, None] - answer.term * colour + answer.delta
        for slope, pattern in zip(answer.slopes, patterns, strict=True):
            rest = rest - slope * pattern
        return answer, rest, float(np.sum(weight * rest**2) + np.sum(prior * answer.delta**2))

    widest = list(groups.values())[-1]
    floor = 0.0
    for _ in range(3):
        answer, rest, _chi2 = fit(widest, floor, prior)
        dof = standing.sum() - standing.any(axis=1).sum() - standing.any(axis=0).sum() - 2 * len(widest)
        floor = additive_floor(rest[standing], err[standing], max(float(dof), 1.0))
        own = np.diag(answer.covariance)[: len(colour)]
        free = float(np.sum(np.clip(1.0 - prior * own, 0.0, 1.0)))
        if free > 1.0:
            # A catalogue worse than it says must not be taken for a plane.
            prior = prior / max(1.0, float(np.sum(prior * answer.delta**2)) / free)
    penalty = float(np.log(standing.sum()))
    best = min(groups, key=lambda name: fit(groups[name], floor, prior)[2] + 2 * len(groups[name]) * penalty)
    if not groups[best]:
        return no_planes(n_frames)
    answer, _, _ = fit(groups[best], floor, prior)
    slope, covariance = np.zeros((n_frames, 2)), np.zeros((n_frames, 2, 2))
    for k, members in enumerate(groups[best]):
        mine = np.isin(side, members)
        at = len(colour) + 1 + 2 * k
        slope[mine] = answer.slopes[2 * k : 2 * k + 2]
        covariance[mine] = answer.covariance[at : at + 2, at : at + 2]
    size = 2 * float(np.max(np.hypot(slope[:, 0], slope[:, 1])))
    return Planes(slope, covariance, np.zeros(n_frames), f"{best}, up to {size:.3f} mag from one side to the other")


def _candidates(standing: NDArray[np.bool_], place: Floats, side: NDArray[np.int64]) -> dict[str, list[list[int]]]:
    """Name → sides that share each plane; the simplest first. Only planes that the stars' places can tell."""
    there = sorted(set(side[standing.any(axis=1)].tolist()))
    candidates: dict[str, list[list[int]]] = {"": [], "one plane": [there]}
    if len(there) > 1:
        candidates["a plane for each side of the pier"] = [[one] for one in there]
    return {
        name: members
        for name, members in candidates.items()
        if all(_spread(place[standing & np.isin(side, sides)[:, None]]) > LEAST_SPREAD for sides in members)
    }


def _spread(places: Floats) -> float:
    """Scatter of places (n, 2) along the direction where it is smallest."""
    if len(places) < LEAST_STARS:
        return 0.0
    off = places - places.mean(axis=0)
    return float(np.sqrt(max(np.linalg.eigvalsh(np.einsum("ni,nj->ij", off, off) / len(off))[0], 0.0)))


def _widest(residual: Floats, standing: NDArray[np.bool_]) -> float:
    """Five robust sigmas of all residuals, at least 0.1 mag."""
    known = residual[standing & np.isfinite(residual)]
    return max(0.1, 5.0 * 1.4826 * float(np.median(np.abs(known)))) if len(known) else np.inf


def with_frame_planes(
    planes: Planes, deviation: Floats, err: Floats, standing: NDArray[np.bool_], place: Floats
) -> Planes:
    """The same planes, plus one for every frame whose own stars demand it.

    Parameters
    ----------
    deviation
        (F, S) measured - star's mean, mag.
    err
        (F, S) error of one measurement, σ_star included.
    standing
        (F, S) measurements that may take part.
    place
        (F, S, 2).

    Notes
    -----
    A plane must lower chi² (over the chi²/dof that is left with it) by more than 2 ln N, N the number of all
    measurements: among thousands of frames without cloud hardly one gets a plane.
    """
    known = standing & np.isfinite(deviation) & np.isfinite(place).all(axis=2) & (err > 0)
    u, value = np.nan_to_num(place), -np.where(known, deviation, 0.0)
    terms = np.stack([np.ones(known.shape), u[:, :, 0], u[:, :, 1]], axis=-1)
    weight = np.where(known, 1.0 / np.where(known, err, 1.0) ** 2, 0.0)
    keep = known.copy()
    for _ in range(3):
        inverse, plane = _weighted_planes(np.where(keep, weight, 0.0), terms, value)
        rest = value - np.einsum("fk,fsk->fs", plane, terms)
        n = keep.sum(axis=1)
        chi2 = np.einsum("fs,fs->f", np.where(keep, weight, 0.0), rest**2)
        scale = np.maximum(1.0, chi2 / np.maximum(n - 3, 1))
        keep = known & (rest**2 * weight <= CLIP_SIGMA**2 * scale[:, None])
    n, w = keep.sum(axis=1), np.where(keep, weight, 0.0)
    inverse, plane = _weighted_planes(w, terms, value)
    rest = value - np.einsum("fk,fsk->fs", plane, terms)
    chi2 = np.einsum("fs,fs->f", w, rest**2)
    total = np.maximum(w.sum(axis=1), 1e-300)
    level = np.einsum("fs,fs->f", w, value) / total
    without = np.einsum("fs,fs->f", w, (value - level[:, None]) ** 2)
    scale = np.maximum(1.0, chi2 / np.maximum(n - 3, 1))
    demanded = (n >= LEAST_STARS_OF_FRAME) & ((without - chi2) / scale > 2 * np.log(max(int(known.sum()), 2)))
    slope = np.where(demanded[:, None], plane[:, 1:], 0.0)
    covariance = np.where(demanded[:, None, None], inverse[:, 1:, 1:] * scale[:, None, None], 0.0)
    return Planes(
        planes.slope_mag + slope,
        planes.covariance + covariance,
        2 * np.hypot(slope[:, 0], slope[:, 1]),
        planes.season,
    )


def _weighted_planes(weight: Floats, terms: Floats, value: Floats) -> tuple[Floats, Floats]:
    """(F, 3, 3) inverse normal matrices and (F, 3) planes; a frame without enough stars gets a level one."""
    normal = np.einsum("fs,fsk,fsl->fkl", weight, terms, terms)
    right = np.einsum("fs,fsk,fs->fk", weight, terms, value)
    scale = np.maximum(normal[:, 0, 0], 1e-300)
    poor = (np.linalg.det(normal / scale[:, None, None]) < 1e-6) | ((weight > 0).sum(axis=1) < LEAST_STARS_OF_FRAME)
    normal[poor], right[poor] = np.eye(3), 0.0
    inverse = np.linalg.inv(normal)
    return inverse, np.einsum("fkl,fl->fk", inverse, right)
