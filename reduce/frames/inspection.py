"""What a file is and what was understood of it, for people and scripts."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

from reduce.frames.arrival import refuse_future
from reduce.frames.reader import iso_time, open_frame
from reduce.records import FrameError
from reduce.settings import Settings

_INSPECTED = (
    "file", "usable", "kind", "band", "filter", "mid_time", "mjd_mid", "exposure_s", "ra_deg", "dec_deg",
    "scale_arcsec", "gain_e_per_adu", "read_noise_e", "saturation_adu", "nx", "ny", "binning", "temperature_c",
    "camera", "object", "calibrated", "notes", "reason",
)  # fmt: skip


def inspect_file(path: Path, settings: Settings, now_s: float | None = None) -> dict[str, Any]:
    """What a file is and what was understood of it, as plain data: unknown numbers are None.

    Raises nothing for a bad file: ``usable`` is then False and ``reason`` says why.

    Parameters
    ----------
    now_s
        Of the clock that refuses frames of the future, seconds since 1970; None: any time will do.
    """
    try:
        frame = open_frame(path, settings)
        frame.read()
        if now_s is not None:
            refuse_future(frame.info, now_s)
    except FrameError as error:
        return {**dict.fromkeys(_INSPECTED), "file": str(path), "usable": False, "notes": [], "reason": str(error)}
    info = asdict(frame.info)
    return {
        **{key: info.get(key) for key in _INSPECTED},
        "file": str(path),
        "usable": True,
        "filter": frame.info.filter_name,
        "object": frame.info.object_name,
        "mid_time": None if frame.info.mjd_mid is None else iso_time(frame.info.mjd_mid),
        "binning": list(frame.info.binning),
        "calibrated": list(frame.info.calibrated),
        "notes": list(frame.info.notes),
        "reason": "",
    }
