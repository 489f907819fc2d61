"""What was done to a frame before it came: steps of calibration that must not be done again, and the pixels' unit."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from reduce.frames.header import CardValue, Header
from reduce.frames.master_sets import ChosenMasters
from reduce.records import CalibrationStep, FrameInfo, FrameKind, Image
from reduce.settings import Settings

STEPS: tuple[CalibrationStep, ...] = ("bias", "dark", "flat")
SAMPLE_ROWS = 32
MOST_BELOW_ZERO = 0.02
"""Share of pixels below zero that no raw frame has: a camera's offset keeps its noise above zero."""
_PER_SECOND = re.compile(r"(/|\bper\b|\.|\s)\s*s(ec|econds?)?\b(\s*(\^|\*\*)?\s*[(]?-\s*1[)]?)?\s*$", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class PixelUnit:
    """What one unit of the stored numbers is."""

    electrons: bool = False
    per_second: bool = False
    physical: str = ""
    """The unit, when it is none that can be counted."""


def earlier_steps(header: Header, words: Mapping[str, list[str]], notes: list[str]) -> tuple[CalibrationStep, ...]:
    """Steps that keywords or lines of history say were done; a sentence in ``notes`` names the evidence.

    A flat is applied to what is left after bias and dark, so a frame that was divided by a flat needs neither.
    """
    evidence: dict[CalibrationStep, str] = {}
    for step in STEPS:
        for keyword in words[step]:
            if _is_done(header.values.get(keyword), words["not_done"]):
                evidence.setdefault(step, f"keyword {keyword}")
    for keyword in words["letters"]:
        letters = header.text(keyword).upper()
        if re.fullmatch("[A-Z, ]{1,12}", letters):
            for step in STEPS:
                if step[0].upper() in letters:
                    evidence.setdefault(step, f"keyword {keyword}")
    for line in header.history:
        if any(re.search(pattern, line, re.IGNORECASE) for pattern in words["negations"]):
            continue
        for step in STEPS:
            if any(re.search(pattern, line, re.IGNORECASE) for pattern in words[f"{step}_lines"]):
                evidence.setdefault(step, "a line of its history")
    if not evidence:
        return ()
    said = ", ".join(f"{step} by {evidence[step]}" for step in STEPS if step in evidence)
    notes.append(f"calibrated before it came here ({said}); these steps are not done again.")
    return STEPS if "flat" in evidence else tuple(step for step in STEPS if step in evidence)


def _is_done(value: CardValue, not_done: list[str]) -> bool:
    if value is None or isinstance(value, bool):
        return value is True
    if isinstance(value, (int, float)):
        return value == 1
    return value.strip().casefold() not in not_done


def pixel_unit(header: Header, words: Mapping[str, list[str]]) -> PixelUnit:
    """The unit that the header states; counts when it states none, or one that says nothing."""
    text = header.first_text(words["unit"])
    per_second = _PER_SECOND.search(text)
    base = (text[: per_second.start()] if per_second else text).strip(" ()[]").casefold()
    base = re.sub(r"\s*(/|\bper\b)\s*pix(el)?$", "", base)
    if base in words["electron_words"]:
        return PixelUnit(electrons=True, per_second=per_second is not None)
    if base in words["count_words"]:
        return PixelUnit(per_second=per_second is not None)
    is_physical = any(word in words["physical_words"] for word in re.findall("[a-z]+", base))
    return PixelUnit(physical=text if is_physical else "")


def adu_per_unit(
    header: Header, words: Mapping[str, list[str]], info: FrameInfo, settings: Settings
) -> tuple[float, FrameInfo]:
    """ADU that one unit of the stored numbers stands for, and the info with what follows from that.

    Electrons are turned back into ADU, so that gain, read noise and saturation keep their meaning; where nobody states
    the gain, an ADU is one electron. Electrons or rates are never raw: all steps are taken as done.
    """
    unit = pixel_unit(header, words)
    if not (unit.electrons or unit.per_second):
        return 1.0, info
    notes, factor = list(info.notes), 1.0
    if unit.electrons:
        gain = info.gain_e_per_adu or settings.camera.gain_e_per_adu
        factor /= gain or 1.0
        info = info if gain else replace(info, gain_e_per_adu=1.0)
    if unit.per_second:
        factor *= info.exposure_s or 1.0
    stored = header.first_text(words["unit"])
    notes.append(f"the pixels are in {stored!r} and were turned back into counts of the exposure.")
    if not info.calibrated:
        notes.append("calibrated before it came here, by the pixels' unit; no step is done again.")
    kind: FrameKind = info.kind if info.kind == "light" else "unknown"
    return factor, replace(info, kind=kind, calibrated=STEPS, notes=tuple(notes))


def has_no_offset(image: Image) -> bool:
    """Whether so many pixels lie below zero that the camera's offset, or the sky, was subtracted."""
    finite = image[np.isfinite(image)]
    return len(finite) > 0 and float((finite < 0).mean()) > MOST_BELOW_ZERO


def without_done(info: FrameInfo, chosen: ChosenMasters) -> ChosenMasters:
    """The chosen masters less those of the steps that were done before.

    With the offset off, a master dark has nothing to be subtracted from, as it holds the offset too.
    """
    if not info.calibrated:
        return chosen
    return ChosenMasters(flat=None if "flat" in info.calibrated else chosen.flat)
