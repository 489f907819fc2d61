"""Satellites and aeroplanes: straight lines across a frame, found by counting cells along every line.

A trail is as faint as a star can be and still spoil it, so single cells say little. Along a line (Hough 1962; Duda &
Hart 1972, CACM 15, 11) the cells above +1 sigma are counted: 16 % of them in pure noise, nearly all on a trail. A
star, a galaxy or a cosmic ray is many sigma high but short, and counts with its few cells only.

Lines along rows or columns are left alone: detectors make those themselves (bad columns, blooming, amplifiers), and
one trail in twenty runs that way.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.measure.aperture import ladder_radii_px
from reduce.measure.backdrop import Backdrop
from reduce.records import Detections, Floats, Image, Mask, StarFlag

HIGH_SIGMA = 1.0
HIGH_IN_NOISE = 0.1587
"""Fraction of noise above +1 sigma."""
LEAST_EXCESS_SIGMA = 8.0
"""In units of the frame's own scatter from line to line: about 3 × 10⁴ are looked at, and where wings of stars or
fringes are left, high cells come in clumps."""
LEAST_CONTRAST = 0.2
"""More of the cells on a line must be high than on its parallels a few cells away: what is broad is no trail."""
PARALLEL_CELLS = (5, 9)
PIECES, LIT_PIECES = 8, 4
"""A line is cut into pieces; in so many of them it must be there."""
LEAST_FRACTION = 0.4
"""Of the cells along a line that must be high."""
LEAST_CELLS = 40
MOST_UNEVEN, MOST_UNEVEN_SPIKE = 6.0, 2.0
"""A trail is about as bright everywhere, an edge-on galaxy is not: 90th percentile over median of the high cells. The
second for lines through a saturated star, which may be its diffraction spikes."""
ANGLES = 180
AXIS_DEG = 2.0
MOST_TRAILS = 5
NEAR_CELLS = 2.5
"""Cells this far from a line belong to it."""
PROFILE_FWHM = 6.0
"""Half-width of the cross section that is looked at."""
CLEAR_SIGMA, FAINT_FWHM = 10.0, 1.5
"""A cross section that stands out less than this is too noisy to say how wide it is: taken as wide as a star's."""
SPOILT = 0.02
"""Fraction of the trail's peak that reaches into an aperture without harm."""


@dataclass(frozen=True, slots=True)
class Trail:
    """A line: all points with ``x cos(angle) + y sin(angle) = distance``."""

    angle_deg: float
    distance_px: float
    half_width_px: float
    """Beyond it the trail's light is below 2 % of its peak or lost in the noise."""

    def off_px(self, x_px: Floats, y_px: Floats) -> Floats:
        """Distance of points from the line."""
        angle = np.radians(self.angle_deg)
        off: Floats = np.abs(x_px * np.cos(angle) + y_px * np.sin(angle) - self.distance_px)
        return off


def find_trails(behind: Backdrop, data_e: Image, mask: Mask, stars: Detections, fwhm_px: float) -> tuple[Trail, ...]:
    """Trails of one frame, the most significant first; at most 5.

    Parameters
    ----------
    behind
        The frame's star-free sky.
    data_e, mask
        (ny, nx) the frame itself, for the cross section.
    stars
        All detections.
    """
    z = behind.significance.copy()
    rows, columns = z.shape
    found: list[Trail] = []
    if min(rows, columns) < LEAST_CELLS or not np.isfinite(z).any():
        return ()
    for _ in range(MOST_TRAILS):
        line = _strongest(z)
        if line is None:
            break
        angle, distance = _refined(z, *line)
        off = _off_cells(z.shape, angle, distance)
        if not _along_axis(angle) and _is_trail(z, off, angle, _through_saturated(stars, behind, angle, distance)):
            found.append(_on_frame(angle, distance, behind, data_e, mask, fwhm_px))
        z[off <= 2 * NEAR_CELLS] = np.nan
    return tuple(found)


def _through_saturated(stars: Detections, behind: Backdrop, angle_deg: float, distance: float) -> bool:
    """Whether the line (in cells) passes near a saturated star."""
    shift = (behind.cell_px - 1) / 2.0
    x, y = (stars.x_px[stars.saturated] - shift, stars.y_px[stars.saturated] - shift)
    line = Trail(angle_deg, distance * behind.cell_px, 0.0)
    return bool((line.off_px(x, y) < 2 * NEAR_CELLS * behind.cell_px).any())


def _is_trail(z: Floats, off: Floats, angle_deg: float, spike: bool) -> bool:
    """Whether the cells on a line are bright all along and evenly."""
    on = (off <= 1.0) & np.isfinite(z)
    values = z[on]
    high = values > HIGH_SIGMA
    if not high.any():
        return False
    if np.percentile(values[high], 90) > (MOST_UNEVEN_SPIKE if spike else MOST_UNEVEN) * np.median(values[high]):
        return False
    y, x = np.nonzero(on)
    angle = np.radians(angle_deg)
    order = np.argsort(y * np.cos(angle) - x * np.sin(angle), kind="stable")
    pieces = [float(piece.mean()) for piece in np.array_split(high[order], PIECES)]
    return sum(share >= LEAST_FRACTION for share in pieces) >= LIT_PIECES


def mark_trails(table: NDArray[Any], trails: tuple[Trail, ...], fwhm_px: float, scale_arcsec: float) -> None:
    """Set StarFlag.TRAIL, in place, for every aperture of STAR_DTYPE rows that a trail reaches into."""
    radii = ladder_radii_px(fwhm_px, scale_arcsec)
    for trail in trails:
        off = trail.off_px(table["x_px"], table["y_px"])
        reached = off[:, None] < radii + trail.half_width_px
        table["flags"] |= np.where(reached, int(StarFlag.TRAIL), 0).astype(np.uint32)
        table["psf_flags"] |= np.where(off < 2.0 * fwhm_px + trail.half_width_px, int(StarFlag.TRAIL), 0).astype(
            np.uint32
        )


@lru_cache(maxsize=4)
def _lines(rows: int, columns: int) -> tuple[Floats, NDArray[np.int32], int]:
    """Angles, (angles, cells) number of the line that each cell lies on at each angle, and how many lines."""
    degrees = (np.arange(ANGLES) + 0.5) * 180.0 / ANGLES
    degrees = degrees[[not _along_axis(angle) for angle in degrees]]
    y, x = np.indices((rows, columns)).reshape(2, -1)
    angle = np.radians(degrees)[:, None]
    reach = int(np.ceil(np.hypot(rows, columns)))
    which = np.rint(x * np.cos(angle) + y * np.sin(angle)).astype(np.int32) + reach
    return degrees, which, 2 * reach + 1


def _along_axis(angle_deg: float) -> bool:
    """Along a row or a column of the detector."""
    return abs((angle_deg + 45.0) % 90.0 - 45.0) <= AXIS_DEG


def _strongest(z: Floats) -> tuple[float, float] | None:
    """Angle and distance (cells) of the line with the most significant excess of high cells."""
    degrees, which, n_lines = _lines(*z.shape)
    known = np.flatnonzero(np.isfinite(z.ravel()))
    high = np.flatnonzero(z.ravel() > HIGH_SIGMA)
    first, last = PARALLEL_CELLS
    excesses, contrasts = [], []
    for k in range(len(degrees)):
        n = np.bincount(which[k, known], minlength=n_lines)
        m = np.bincount(which[k, high], minlength=n_lines)
        excess = (m - HIGH_IN_NOISE * n) / np.sqrt(HIGH_IN_NOISE * (1 - HIGH_IN_NOISE) * np.maximum(n, 1))
        excesses.append(np.where(n >= LEAST_CELLS, excess, np.nan))
        m_sum, n_sum = np.concatenate([[0], np.cumsum(m)]), np.concatenate([[0], np.cumsum(n)])
        at = np.arange(n_lines)
        beside = []
        for low, up in ((at + first, at + last), (at - last, at - first)):
            low, up = np.clip(low, 0, n_lines), np.clip(up, 0, n_lines)
            beside.append((m_sum[up] - m_sum[low]) / np.maximum(n_sum[up] - n_sum[low], 1))
        share = m / np.maximum(n, 1)
        contrasts.append(np.where(share >= LEAST_FRACTION, share - np.maximum(*beside), 0.0))
    table, contrast = np.array(excesses), np.array(contrasts)
    usual = table[np.isfinite(table)]
    if len(usual) == 0:
        return None
    scale = max(1.0, 1.4826 * float(np.median(np.abs(usual - np.median(usual)))))
    table = np.where(np.isfinite(table) & (contrast >= LEAST_CONTRAST), table / scale, 0.0)
    top, line = np.unravel_index(int(np.argmax(table)), table.shape)
    if table[top, line] <= LEAST_EXCESS_SIGMA:
        return None
    return float(degrees[top]), float(line - n_lines // 2)


def _off_cells(shape: tuple[int, ...], angle_deg: float, distance: float) -> Floats:
    y, x = np.indices(shape)
    angle = np.radians(angle_deg)
    off: Floats = np.abs(x * np.cos(angle) + y * np.sin(angle) - distance)
    return off


def _refined(z: Floats, angle_deg: float, distance: float) -> tuple[float, float]:
    """Straight line through the cells near a first guess, weighted by their height."""
    for _ in range(3):
        near = (_off_cells(z.shape, angle_deg, distance) <= NEAR_CELLS) & (z > HIGH_SIGMA)
        y, x = np.nonzero(near)
        weight = np.minimum(z[near], 20.0)
        if len(x) < LEAST_CELLS / 4:
            break
        angle = np.radians(angle_deg)
        along, across = y * np.cos(angle) - x * np.sin(angle), x * np.cos(angle) + y * np.sin(angle) - distance
        middle = float(np.average(along, weights=weight))
        spread = float(np.sum(weight * (along - middle) ** 2))
        slope = float(np.sum(weight * (along - middle) * across)) / spread if spread > 0 else 0.0
        level = float(np.average(across, weights=weight))
        # The line across = level + slope (along - middle), turned back into the form with an angle.
        turned = angle - np.arctan(slope)
        point = distance + level - slope * middle
        angle_deg, distance = float(np.degrees(turned)), float(point * np.cos(np.arctan(slope)))
    return angle_deg, distance


def _on_frame(angle_deg: float, distance: float, behind: Backdrop, data_e: Image, mask: Mask, fwhm_px: float) -> Trail:
    """The line in pixels of the frame, centred on its cross section, with its half-width."""
    side, angle = behind.cell_px, np.radians(angle_deg)
    # The middle of cell (0, 0) is pixel (side - 1)/2.
    shift = (side - 1) / 2.0 * (np.cos(angle) + np.sin(angle))
    trail = Trail(angle_deg, distance * side + shift, 0.0)
    reach = round(PROFILE_FWHM * fwhm_px + 2 * side)
    steps = np.arange(-reach, reach + 1)
    along = np.arange(-np.hypot(*data_e.shape), np.hypot(*data_e.shape), 1.0)
    x = np.rint((trail.distance_px + steps[:, None]) * np.cos(angle) - along * np.sin(angle)).astype(int)
    y = np.rint((trail.distance_px + steps[:, None]) * np.sin(angle) + along * np.cos(angle)).astype(int)
    ny, nx = data_e.shape
    inside = (x >= 0) & (x < nx) & (y >= 0) & (y < ny)
    values = np.where(inside, data_e[np.where(inside, y, 0), np.where(inside, x, 0)], np.nan)
    values[~inside | (mask[np.where(inside, y, 0), np.where(inside, x, 0)] != 0)] = np.nan
    with np.errstate(invalid="ignore"):
        profile = _row_medians(values)
    edge = np.concatenate([profile[: reach // 4], profile[-(reach // 4) :]])
    profile = profile - np.nanmedian(edge)
    noise = 1.4826 * float(np.nanmedian(np.abs(edge - np.nanmedian(edge))))
    near = np.abs(steps) <= side + fwhm_px
    peak = float(np.nanmax(profile[near]))
    bright = near & (profile > 0.5 * peak)
    centre = float(np.average(steps[bright], weights=profile[bright])) if peak > 0 and bright.any() else 0.0
    lit = max(SPOILT * peak, 4.0 * noise / np.sqrt(2.0))
    half, off = 0, np.abs(steps - round(centre))
    # Both sides together: noise on one side alone would widen the trail.
    while half < reach and float(np.mean(profile[off == half])) > lit:
        half += 1
    if peak < CLEAR_SIGMA * noise:
        half = min(half, round(FAINT_FWHM * fwhm_px))
    return Trail(angle_deg, float(trail.distance_px + centre), max(float(half), 0.5 * fwhm_px))


def _row_medians(values: Floats) -> Floats:
    """Median of each row without NaN; NaN for an empty row."""
    result = np.full(len(values), np.nan)
    full = np.isfinite(values).any(axis=1)
    result[full] = np.nanmedian(values[full], axis=1)
    return result
