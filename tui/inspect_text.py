"""What was understood of a file, as plain lines."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from reduce.plain_text import clean_text

_SHOWN = (
    ("kind", ""), ("band", ""), ("filter", ""), ("object", ""), ("camera", ""), ("mid_time", "UTC"),
    ("exposure_s", "s"), ("ra_deg", "deg"), ("dec_deg", "deg"), ("scale_arcsec", "arcsec/pixel"),
    ("gain_e_per_adu", "e-/ADU"), ("read_noise_e", "e-"), ("saturation_adu", "ADU"), ("temperature_c", "°C"),
    ("calibrated", ""),
)  # fmt: skip


def inspect_lines(found: Mapping[str, Any]) -> list[str]:
    """Lines of text for one file; unknown values say so instead of a number."""
    name = clean_text(found["file"])
    if not found["usable"]:
        return [f"{name}: cannot be used: {found['reason']}"]
    lines = [f"{name}: {found['nx']} × {found['ny']} pixels"]
    for key, unit in _SHOWN:
        value = found.get(key)
        if isinstance(value, list):
            value = ", ".join(value) or "not yet"
        text = "not stated" if value is None or value == "" else f"{value:.8g}" if isinstance(value, float) else value
        lines.append(f"  {key.split('_')[0]:12} {text} {unit if value is not None else ''}".rstrip())
    return lines + [f"  note: {note}" for note in found.get("notes", ())]
