"""How stored images become one frame: overscan, trimmed edges, amplifiers side by side, the window on the detector.

Sections follow the usual keywords: DATASEC or TRIMSEC saw the sky, BIASSEC did not, and DETSEC or CCDSEC says where on
the detector, in unbinned pixels, the data section lies; counted downwards it is mirrored.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from reduce.frames.header import Header
from reduce.frames.section import Section, section_of
from reduce.records import FrameError, Image

TRIM_WORDS, OVERSCAN_WORDS, DETECTOR_WORDS = "trim_section", "overscan_section", "detector_section"
SMOOTH_LINES = 21
"""Lines whose overscan a straight line is put through: the drift is followed, the noise of single lines is not."""
LEFT_OVER_PX, WIDE_PX = 2, 8
"""The first columns of a wide overscan still hold charge that was left behind (common practice)."""


@dataclass(frozen=True, slots=True)
class Part:
    """What one amplifier read."""

    extension: int
    data: Section
    """Of the stored image; flips say how it is turned to lie as on the detector."""
    overscan: Section | None
    x0: int = 0
    y0: int = 0
    """Where it begins in the frame."""
    relative_gain: float = 1.0
    """Its gain over the frame's."""


@dataclass(frozen=True, slots=True)
class Readout:
    """All parts of one frame."""

    parts: tuple[Part, ...]
    nx: int
    ny: int
    window: tuple[int, int] | None = None
    """Column and row of the detector, as binned, where the frame begins."""


def one_image(
    header: Header, extension: int, axes: tuple[int, ...], words: dict[str, list[str]], notes: list[str]
) -> Readout:
    """Of an image that stands alone.

    Parameters
    ----------
    axes
        (nx, ny) as stored.
    words
        Keywords under ``trim_section``, ``overscan_section``, ``detector_section``, ``window_x`` and ``window_y``.
    notes
        Gets a sentence for all that is cut, subtracted or not understood.
    """
    nx, ny = axes[:2]
    whole = Section(0, nx, 0, ny)
    text = header.first_text(words[TRIM_WORDS])
    data = section_of(text) if text else whole
    if data is None:
        notes.append(f"section {text!r} cannot be read; the whole image is used.")
        data = whole
    elif data.flip_x or data.flip_y or not data.lies_on(nx, ny):
        notes.append(f"section {text} does not lie on the image; the whole image is used.")
        data = whole
    if not text and header.first_text(words[OVERSCAN_WORDS]):
        notes.append("the header names an overscan but not the part that saw the sky; nothing was cut off.")
    overscan = None if data == whole else _overscan(header, data, nx, ny, words)
    if data != whole:
        notes.append(
            f"only {text} is used: the overscan was subtracted and cut off."
            if overscan
            else f"only {text} is used: the rest was cut off."
        )
    window = _window(header, data, data != whole, words)
    return Readout((Part(extension, data, overscan),), data.nx, data.ny, window)


def _overscan(header: Header, data: Section, nx: int, ny: int, words: dict[str, list[str]]) -> Section | None:
    """The overscan that gives a level for every row or every column of the data, None when there is none."""
    strip = section_of(header.first_text(words[OVERSCAN_WORDS]))
    if strip is None or not strip.lies_on(nx, ny):
        return None
    beside = strip.y0 <= data.y0 and strip.y1 >= data.y1 and (strip.x1 <= data.x0 or strip.x0 >= data.x1)
    above = strip.x0 <= data.x0 and strip.x1 >= data.x1 and (strip.y1 <= data.y0 or strip.y0 >= data.y1)
    if beside:
        skip = LEFT_OVER_PX if strip.nx >= WIDE_PX else 0
        after = strip.x0 >= data.x1
        return Section(strip.x0 + skip * after, strip.x1 - skip * (not after), data.y0, data.y1)
    if above:
        skip = LEFT_OVER_PX if strip.ny >= WIDE_PX else 0
        after = strip.y0 >= data.y1
        return Section(data.x0, data.x1, strip.y0 + skip * after, strip.y1 - skip * (not after))
    return None


def _window(header: Header, data: Section, is_cut: bool, words: dict[str, list[str]]) -> tuple[int, int] | None:
    place = _on_detector(header, data, words)
    if place is not None:
        on, step = place
        return None if on.flip_x or on.flip_y else (on.x0 // step[0], on.y0 // step[1])
    x, y = (next((v for _, v in header.numbers(words[key])), None) for key in ("window_x", "window_y"))
    if is_cut or x is None or y is None or min(x, y) < 0 or max(x, y) > 1e6:
        return None
    return int(x), int(y)


def _on_detector(header: Header, data: Section, words: dict[str, list[str]]) -> tuple[Section, tuple[int, int]] | None:
    """Where the data lie on the detector, and how many of its pixels one of theirs is."""
    on = section_of(header.first_text(words[DETECTOR_WORDS]))
    if on is None or on.nx % data.nx or on.ny % data.ny:
        return None
    return on, (on.nx // data.nx, on.ny // data.ny)


def joined_images(
    headers: Sequence[Header], extensions: Sequence[int], axes: Sequence[tuple[int, ...]],
    gains: Sequence[float | None], words: dict[str, list[str]], notes: list[str],
) -> Readout | None:  # fmt: skip
    """Of the images of one detector that several amplifiers read; None when headers do not say where they belong.

    Raises
    ------
    FrameError
        They say it, and the images are no single whole detector.
    """
    if not all(section_of(header.first_text(words[DETECTOR_WORDS])) for header in headers):
        return None
    names = {header.first_text(words["detector_name"]) for header in headers}
    if len(names) > 1:
        raise FrameError(f"the file holds images of {len(names)} detectors; save each detector as a frame of its own.")
    single = [one_image(h, n, shape, words, []) for h, n, shape in zip(headers, extensions, axes, strict=True)]
    places = [_on_detector(h, one.parts[0].data, words) for h, one in zip(headers, single, strict=True)]
    steps = {place[1] for place in places if place is not None}
    if None in places or len(steps) != 1:
        raise FrameError(_not_whole(len(headers)))
    step = steps.pop()
    on = [place[0] for place in places if place is not None]
    x0, y0 = min(one.x0 for one in on), min(one.y0 for one in on)
    nx, ny = (max(one.x1 for one in on) - x0) // step[0], (max(one.y1 for one in on) - y0) // step[1]
    known = [gain for gain in gains if gain is not None]
    middle = float(np.mean(known)) if len(known) == len(gains) else None
    if nx * ny != sum(one.nx * one.ny for one in single):
        raise FrameError(_not_whole(len(headers)))
    parts = []
    for one, place, gain in zip(single, on, gains, strict=True):
        part = one.parts[0]
        data = Section(part.data.x0, part.data.x1, part.data.y0, part.data.y1, place.flip_x, place.flip_y)
        relative = 1.0 if middle is None or gain is None else gain / middle
        at = (place.x0 - x0) // step[0], (place.y0 - y0) // step[1]
        parts.append(Part(part.extension, data, part.overscan, *at, relative))
    if any(_overlap(a, b) for k, a in enumerate(parts) for b in parts[:k]):
        raise FrameError(_not_whole(len(headers)))
    with_overscan = sum(part.overscan is not None for part in parts)
    if with_overscan not in (0, len(parts)):
        raise FrameError(f"only {with_overscan} of the {len(parts)} amplifiers have an overscan; correct BIASSEC.")
    notes.append(
        f"{len(parts)} amplifiers were joined"
        + (", each with its own gain" if middle is not None and len(set(known)) > 1 else "")
        + (", and their overscans subtracted." if with_overscan else ".")
    )
    return Readout(tuple(parts), nx, ny, (x0 // step[0], y0 // step[1]))


def _overlap(a: Part, b: Part) -> bool:
    beside = a.x0 + a.data.nx <= b.x0 or b.x0 + b.data.nx <= a.x0
    return not (beside or a.y0 + a.data.ny <= b.y0 or b.y0 + b.data.ny <= a.y0)


def _not_whole(n: int) -> str:
    return (
        f"the {n} images of the file do not make one whole detector by their DETSEC and DATASEC; "
        "save them as frames of their own."
    )


def overscan_level(strip: Image, data: Section) -> Image:
    """Level of every row, (ny, 1), or of every column, (1, nx), from the pixels of the overscan beside the data.

    The median of each line, smoothed by a straight line through it and its 20 neighbours (Savitzky & Golay 1964).
    """
    from scipy.signal import savgol_filter

    by_rows = strip.shape[0] == data.ny
    lines = np.median(np.nan_to_num(strip, nan=float(np.nanmedian(strip))), axis=1 if by_rows else 0)
    width = min(SMOOTH_LINES, len(lines) - 1 + len(lines) % 2)
    level = lines if width < 3 else savgol_filter(lines.astype(np.float64), width, 1)
    level = np.asarray(level, np.float32)
    if by_rows:
        return level[::-1, None] if data.flip_y else level[:, None]
    return level[None, ::-1] if data.flip_x else level[None, :]
