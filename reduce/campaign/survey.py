"""What lies in a folder of frames, before there is a campaign: by names and headers, no pixel is looked at."""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from reduce.almanac.times import night_of
from reduce.frames.arrival import scan
from reduce.frames.reader import open_frame
from reduce.plain_text import clean_text
from reduce.records import FrameError, FrameInfo
from reduce.settings import Settings
from reduce.views import FilterRow, FolderSurvey, ObjectRow

NO_NAME = "(no name)"
SAME_PLACE_DEG = 0.5
"""Frames of one object that point farther apart than this have no common position."""


def survey_folder(folder: Path, settings: Settings) -> FolderSurvey:
    """Read the header of every file of a folder, and of the folders below it; masters of a campaign do not count."""
    paths = [path for path in scan(folder) if path.parent.name != "masters"]
    infos: list[FrameInfo] = []
    unusable: list[str] = []
    for path in paths:
        try:
            infos.append(open_frame(path, settings).info)
        except FrameError as error:
            unusable.append(f"{clean_text(path.name)}: {error}")
    return survey_of(folder, infos, unusable, settings)


def survey_of(folder: Path, infos: Sequence[FrameInfo], unusable: Sequence[str], settings: Settings) -> FolderSurvey:
    """What these headers say together; pure."""
    longitude_deg = settings.site.longitude_deg if settings.site is not None else None
    nights = sorted({night_of(info.mjd_mid, longitude_deg) for info in infos if info.mjd_mid is not None})
    return FolderSurvey(
        folder=str(folder),
        kinds=dict(Counter(info.kind for info in infos)),
        cameras=tuple(dict.fromkeys(_camera(info) for info in infos if info.kind == "light")),
        filters=filters_of(infos, settings),
        objects=_objects(info for info in infos if info.kind == "light"),
        nights=tuple(dict.fromkeys((nights[0], nights[-1]))) if nights else (),
        missing=tuple(_missing(infos, settings)),
        unusable=tuple(unusable),
    )


def filters_of(infos: Iterable[FrameInfo], settings: Settings) -> tuple[FilterRow, ...]:
    """Filter names of lights and flats, those that have no band first; then by name."""
    count: Counter[str] = Counter()
    bands: dict[str, str | None] = {}
    for info in infos:
        if info.kind in ("light", "flat"):
            count[info.filter_name] += 1
            bands[info.filter_name] = info.band
    rows = [FilterRow(name, bands[name], count[name], name in settings.filters) for name in sorted(bands)]
    return tuple(sorted(rows, key=lambda row: row.band is not None))


def _camera(info: FrameInfo) -> str:
    parts = [info.camera or "camera without a name", f"{info.nx} × {info.ny} pixels"]
    if info.binning != (1, 1):
        parts.append(f"binned {info.binning[0]} × {info.binning[1]}")
    if info.scale_arcsec is not None:
        parts.append(f"{info.scale_arcsec:.3g}″ a pixel")
    if info.gain_e_per_adu is not None:
        parts.append(f"{info.gain_e_per_adu:g} e⁻/ADU")
    if info.read_noise_e is not None:
        parts.append(f"read noise {info.read_noise_e:g} e⁻")
    return ", ".join(parts)


def _objects(lights: Iterable[FrameInfo]) -> tuple[ObjectRow, ...]:
    groups: defaultdict[str, list[FrameInfo]] = defaultdict(list)
    for info in lights:
        groups[info.object_name or NO_NAME].append(info)
    rows = [ObjectRow(name, len(group), *_place(group)) for name, group in groups.items()]
    return tuple(sorted(rows, key=lambda row: (-row.n_frames, row.name)))


def _place(group: Sequence[FrameInfo]) -> tuple[float | None, float | None]:
    """Median of where the frames point; nothing when they do not point at one place."""
    points = np.array([(i.ra_deg, i.dec_deg) for i in group if i.ra_deg is not None and i.dec_deg is not None])
    if not len(points):
        return None, None
    ra = (points[:, 0] - points[0, 0] + 180.0) % 360.0 - 180.0 + points[0, 0]
    dec = points[:, 1]
    if max(np.ptp(ra) * np.cos(np.radians(dec[0])), np.ptp(dec)) > SAME_PLACE_DEG:
        return None, None
    return float(np.median(ra)) % 360.0, float(np.median(dec))


def _missing(infos: Sequence[FrameInfo], settings: Settings) -> Iterable[str]:
    lights = [info for info in infos if info.kind == "light"]
    raw = [info for info in lights if not info.calibrated]
    kinds = {info.kind for info in infos}
    camera = settings.camera
    if not lights:
        yield "No light frames: they may come later."
    unnamed = sorted({info.filter_name or "(none stated)" for info in lights if info.band is None})
    if unnamed:
        yield f"No band is known for filter {', '.join(map(repr, unnamed))}: such frames cannot be measured."
    if raw and not kinds & {"bias", "dark"}:
        yield "No bias and no dark frames: the offset cannot be taken off yet."
    flats = {info.band for info in infos if info.kind == "flat"}
    without = sorted({info.band for info in raw if info.band is not None} - {band for band in flats if band})
    if without:
        yield f"No flats in {', '.join(without)}: frames count as doubtful until there are some."
    if lights and camera.gain_e_per_adu is None and any(info.gain_e_per_adu is None for info in lights):
        yield "No header states the gain: type it, or let pairs of flats and biases measure it; frames wait for it."
    if lights and camera.scale_arcsec is None and any(info.scale_arcsec is None for info in lights):
        yield "No header states the pixel scale: the field is found more surely when you give it."
    unsure = sum(any("taken as a light; the header" in note for note in info.notes) for info in lights)
    if unsure:
        yield f"{unsure} files do not say what they are and count as lights: Setup, Kinds, tells others by their names."
    if any(info.mjd_mid is None for info in lights):
        n = sum(info.mjd_mid is None for info in lights)
        yield f"{n} light frames state no time: they cannot be used."
