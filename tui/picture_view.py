"""What part of a frame a picture shows, what is marked on it and what a picked star says (no Textual)."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from rich.text import Text

from tui.number_text import number, with_error
from tui.preview_image import Window, clamped
from tui.widgets.preview import Ring

if TYPE_CHECKING:
    from reduce.views import FrameRow, StarReading

TARGET_COLOUR, COMPARISON_COLOUR = "#e69f00", "#56b4e9"
TARGET_BRACKETS, COMPARISON_BRACKETS = "()", "[]"
LEAST_SIDE_PX = 12
"""A window is never made narrower."""
PSF_RADIUS_FWHM = 1.0
"""Drawn about a star that is measured under the PSF."""


@dataclass(frozen=True, slots=True)
class View:
    """Part of a frame on a widget: its centre and how often it was halved."""

    frame_nx: int
    frame_ny: int
    centre: tuple[float, float]
    zoom: int = 0

    def window(self, columns: int, rows: int) -> Window:
        """The pixels shown on a widget of so many cells; the whole frame before the first halving."""
        if self.zoom == 0:
            return 0, 0, self.frame_nx, self.frame_ny
        block = max(self.frame_nx / columns, self.frame_ny / (2 * rows)) / 2**self.zoom
        wide, high = max(round(columns * block), LEAST_SIDE_PX), max(round(2 * rows * block), LEAST_SIDE_PX)
        x0, y0 = round(self.centre[0] - (wide - 1) / 2), round(self.centre[1] - (high - 1) / 2)
        return clamped((x0, y0, wide, high), self.frame_nx, self.frame_ny)

    def zoomed(self, step: int, about: tuple[float, float]) -> View:
        """Halved or doubled about a position."""
        most = max(0, int(math.log2(max(min(self.frame_nx, self.frame_ny) / LEAST_SIDE_PX, 1.0))))
        return replace(self, zoom=min(max(self.zoom + step, 0), most), centre=about)

    def held(self, x_px: float, y_px: float) -> tuple[float, float]:
        """The position, moved onto the frame where it lies off it."""
        return min(max(x_px, 0.0), self.frame_nx - 1.0), min(max(y_px, 0.0), self.frame_ny - 1.0)


def aperture_px(row: FrameRow) -> float:
    """Radius of the frame's aperture; 0 before it has one."""
    if row.zero_point is None or not row.fwhm_arcsec or not row.scale_arcsec:
        return 0.0
    return (row.zero_point.aperture_fwhm or PSF_RADIUS_FWHM) * row.fwhm_arcsec / row.scale_arcsec


def rings_of(row: FrameRow, target: str) -> list[Ring]:
    """Comparison stars, then the target above them."""
    radius = aperture_px(row)
    stars = [
        Ring(x, y, COMPARISON_BRACKETS, COMPARISON_COLOUR, radius)
        for name, (x, y) in row.pixel.items()
        if name not in row.targets
    ]
    return stars + [
        Ring(x, y, TARGET_BRACKETS, TARGET_COLOUR, radius) for name, (x, y) in row.pixel.items() if name == target
    ]


def uncrowded(rings: Sequence[Ring], window: Window, cells: float, cells_a_ring: float) -> list[Ring]:
    """The rings, or only the target's where so many on so few cells would hide the picture."""
    x0, y0, columns, rows = window
    here = sum(x0 <= ring.x_px < x0 + columns and y0 <= ring.y_px < y0 + rows for ring in rings)
    return [ring for ring in rings if here * cells_a_ring <= cells or ring.brackets == TARGET_BRACKETS]


def other_frame(frames: Iterable[FrameRow], row: FrameRow) -> FrameRow | None:
    """The sharpest reference frame in the band, else the sharpest kept one, of another night where there is one."""
    if row.solution is None:
        return None
    others = [f for f in frames if f.band == row.band and f.solution is not None and f.id != row.id]
    chosen = [f for f in others if f.kind == "reference"]
    chosen = chosen or [f for f in others if f.state == "kept" and f.night != row.night]
    chosen = chosen or [f for f in others if f.state == "kept"]
    return min(chosen, key=lambda f: (f.fwhm_arcsec or math.inf, f.id), default=None)


def star_near(stars: Sequence[StarReading], x_px: float, y_px: float, within_px: float) -> StarReading | None:
    """The measured star nearest to a position."""
    near = [(math.hypot(s.x_px - x_px, s.y_px - y_px), k) for k, s in enumerate(stars)]
    distance, k = min(near, default=(math.inf, -1))
    return stars[k] if distance <= within_px else None


def next_star(stars: Sequence[StarReading], x_px: float, y_px: float, step: int) -> StarReading | None:
    """The named star after, or before, the one at a position; targets first."""
    named = sorted((s for s in stars if s.name), key=lambda s: (not s.is_target, -(s.snr or 0.0)))
    if not named:
        return None
    here = next((k for k, s in enumerate(named) if math.hypot(s.x_px - x_px, s.y_px - y_px) < 1.0), None)
    return named[0 if here is None else (here + step) % len(named)]


def star_text(star: StarReading) -> Text:
    """What is known of one star of the frame, in a line or two."""
    text = Text.assemble((star.name or "a star without a name", "bold"))
    if star.mag is None:
        text.append("  no magnitude")
    else:
        text.append(f"  {with_error(star.mag, star.mag_err, 3)} mag", "bold")
    text.append(f"  S/N {number(star.snr, 0)}  peak {number(star.peak_adu, 0)} ADU")
    text.append(f"  FWHM {number(star.fwhm_arcsec, 1)}″  elongation {number(star.elongation, 2)}")
    text.append(f"  x {star.x_px:.1f} y {star.y_px:.1f}")
    text.append(f"  {', '.join(star.flags)}" if star.flags else "  no flag", "#e69f00" if star.flags else "")
    return text
