"""The line after a slew: where the telescope points, how bright the target is, what the night still needs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.text import Text

from tui.band_look import band_colour
from tui.number_text import number

if TYPE_CHECKING:
    from reduce.views import AfterSlew


def after_slew_text(line: AfterSlew | None) -> Text:
    """Two lines: pointing and peak with the advice, and each band's signal-to-noise against its goal."""
    if line is None:
        return Text("")
    text = Text.assemble((line.file, "bold"))
    if line.outcome == "measured":
        text.append(f"  offset {number(line.offset_arcmin, 1)}′  rotation {number(line.rotation_deg, 1)}°")
        if line.peak_adu is not None:
            of = "" if line.limit_adu is None else f" of {number(line.limit_adu, 0)} ADU linear"
            text.append(f"  peak {number(line.peak_adu, 0)}{of}", "bold #e69f00" if line.too_bright else "")
    else:
        text.append(f"  {line.reason}")
    text.append("\nS/N " if line.bands else "\n")
    for band in line.bands:
        here = band.band == line.band
        text.append(band.band, f"{'bold reverse' if here else 'bold'} {band_colour(band.band)}")
        text.append(f" {number(band.snr, 0)}/{number(band.goal, 0)}{' enough' if band.enough else ''}  ")
    text.append(line.advice[:1].upper() + line.advice[1:] + ".", "bold")
    return text
