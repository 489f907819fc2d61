"""When a frame was exposed: MJD in UTC at mid-exposure, or None with the reason; local time is refused, not guessed.

Order of trust (FITS 4.0, section 9): a stated middle, else a stated begin plus half the exposure.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from datetime import date

from reduce.almanac.times import MJD_ZERO_JD, SECONDS_PER_DAY, TT_MINUS_TAI_S, mid_exposure_mjd, tai_minus_utc_s
from reduce.frames.header import Header

AHEAD_OF_TAI_S = {
    "TAI": 0.0, "GPS": -19.0, "TT": TT_MINUS_TAI_S, "TDT": TT_MINUS_TAI_S, "ET": TT_MINUS_TAI_S, "TDB": TT_MINUS_TAI_S,
}  # fmt: skip
"""TDB differs from TT by less than 2 ms."""
EARLIEST_MJD, LATEST_MJD = 15019.0, 88069.0
"""1900 and 2100."""
LARGEST_MJD = 2000000.0
"""A larger number is a Julian date."""
MOST_DISAGREEMENT_S = 600.0
"""Between two time keywords of a header, beyond the exposure: more means that one is not UTC."""
FIRST_CAMERA_YEAR = 70
"""Of the 1900s: the old form of a date with a smaller year was meant for the 2000s, but FITS does not say so."""
_MJD_ZERO = date(1858, 11, 17).toordinal()
_DATE = re.compile(r"^(\d{4})[-/](\d{1,2})[-/](\d{1,2})$")
_OLD_DATE = re.compile(r"^(\d{1,2})/(\d{1,2})/(\d{2})$")
_CLOCK = re.compile(r"^(\d{1,2}):(\d{1,2})(?::(\d{1,2}(?:\.\d*)?))?$")
_MIDNIGHT = re.compile(r"^0?0:00(:00(\.0*)?)?Z?$")
_ZONE = re.compile(r"[+-]\d{1,2}:?\d{0,2}$|[A-Za-z]")
_LOCAL = re.compile(r"\blocal\b|\bLT\b|\bLST\b|civil", re.IGNORECASE)
_UTC = re.compile(r"\bU\.?T\.?C?\b|\bGMT\b|universal", re.IGNORECASE)
_MIDDLE = re.compile(r"\bmid(?!night)", re.IGNORECASE)
_END = re.compile(r"\b(at|of) (the )?end\b|\bend (of|time)\b|shutter clos", re.IGNORECASE)


def mid_time(
    header: Header, words: Mapping[str, list[str]], exposure_s: float | None, notes: list[str]
) -> float | None:
    """MJD (UTC) at mid-exposure; None, with a sentence last in ``notes``, when the header does not settle it."""
    ahead_s = _ahead_of_tai_s(header, words)
    if ahead_s is None:
        notes.append(f"the header's times are in {header.text('TIMESYS')}, which is not UTC; they are not guessed at.")
        return None
    said: list[str] = []
    found = _all_times(header, words, exposure_s, said)
    notes += said
    if not found:
        if not said:
            notes.append("the header holds no time of observation.")
        return None
    keyword, mjd, needs_exposure = found[0]
    for other, other_mjd, _ in found[1:]:
        apart_s = abs(other_mjd - mjd) * SECONDS_PER_DAY
        if apart_s > MOST_DISAGREEMENT_S + (exposure_s or 0.0):
            notes.append(
                f"{keyword} and {other} are {apart_s / 3600.0:.2f} hours apart: one may be local time, neither is used."
            )
            return None
    if needs_exposure and exposure_s is None:
        notes.append("the begin of the exposure is known but not its length: no mid-exposure time.")
        return None
    if math.isnan(ahead_s):
        return mjd
    shift_s = ahead_s + float(tai_minus_utc_s(mjd))
    notes.append(f"times were converted from {header.text('TIMESYS')} to UTC ({-shift_s:+.3f} s).")
    return mjd - shift_s / SECONDS_PER_DAY


def _ahead_of_tai_s(header: Header, words: Mapping[str, list[str]]) -> float | None:
    """How far the header's time scale is ahead of TAI; NaN for UTC, None for a scale that is not known."""
    scale = header.text("TIMESYS").upper()
    return math.nan if not scale or scale in words["utc_names"] else AHEAD_OF_TAI_S.get(scale)


def _all_times(
    header: Header, words: Mapping[str, list[str]], exposure_s: float | None, notes: list[str]
) -> list[tuple[str, float, bool]]:
    """(keyword, MJD at mid-exposure, whether it rests on the exposure), in order of trust."""
    found = []
    half_s = (exposure_s or 0.0) / 2.0
    for keyword in [*words["middle"], *words["start"]]:
        mjd = _instant(header, keyword, words, notes)
        if mjd is None:
            continue
        comment = header.comment(keyword)
        if keyword in words["middle"]:
            found.append((keyword, mjd, False))
        elif _MIDDLE.search(comment):
            notes.append(f"{keyword} is the middle of the exposure by its comment.")
            found.append((keyword, mjd, False))
        elif _END.search(comment):
            notes.append(f"{keyword} is the end of the exposure by its comment.")
            found.append((keyword, mjd - half_s / SECONDS_PER_DAY, True))
        else:
            found.append((keyword, mid_exposure_mjd(mjd, 2.0 * half_s), True))
    return found


def _instant(header: Header, keyword: str, words: Mapping[str, list[str]], notes: list[str]) -> float | None:
    """MJD that one keyword states, in the header's time scale; None, with a sentence, when it states none."""
    if keyword not in header or _says_local(header, keyword, notes):
        return None
    if keyword.startswith("DATE"):
        mjd = _calendar(header, keyword, words, notes)
    else:
        mjd = header.number(keyword)
        if mjd is not None and mjd == int(mjd):
            return None  # a day's number, not a time
        if mjd is not None and mjd > LARGEST_MJD:
            mjd -= MJD_ZERO_JD
    if mjd is None:
        return None
    if not EARLIEST_MJD < mjd < LATEST_MJD:
        notes.append(f"{keyword} = {header.text(keyword)} is no time of an observation; check the camera's clock.")
        return None
    return mjd


def _says_local(header: Header, keyword: str, notes: list[str]) -> bool:
    comment = header.comment(keyword)
    if not _LOCAL.search(comment) or _UTC.search(comment):
        return False
    notes.append(f"{keyword} is local time by its comment and is not used; let the camera write UTC.")
    return True


def _calendar(header: Header, keyword: str, words: Mapping[str, list[str]], notes: list[str]) -> float | None:
    text = header.text(keyword)
    day_text, _, clock_text = text.replace(" ", "T", 1).partition("T")
    day = _day(day_text, keyword, notes)
    if day is None:
        notes.append(f"{keyword} = {text!r} is not a date in the FITS form and was ignored.")
        return None
    if not clock_text or _MIDNIGHT.match(clock_text):
        # Some cameras fill the place of an unknown time of day with zeros.
        elsewhere, clock_keyword = _clock_elsewhere(header, words, notes)
        if elsewhere and not _MIDNIGHT.match(elsewhere):
            notes.append(
                f"the time of day was taken from {clock_keyword}, as {keyword} has none."
                if not clock_text
                else f"the time of day was taken from {clock_keyword}, as {keyword} says midnight."
            )
        if not clock_text and not elsewhere:
            notes.append(f"{keyword} = {text} has no time of day.")
            return None
        clock_text = elsewhere or clock_text
    if clock_text[-1:] in "Zz":
        notes.append(f"{keyword} ends in Z, which FITS does not allow; it was read as UTC.")
        clock_text = clock_text[:-1]
    match = _CLOCK.match(clock_text.strip())
    if match is None:
        what = "carries a time zone" if _ZONE.search(clock_text) else "holds no time of day that can be read"
        notes.append(f"{keyword} = {text} {what} and is not used; let the camera write UTC.")
        return None
    hour, minute, second = int(match[1]), int(match[2]), float(match[3] or 0)
    if hour > 23 or minute > 59 or second >= 61:
        notes.append(f"{keyword} = {text} holds no time of day that can be read and is not used.")
        return None
    return day + (hour * 3600 + minute * 60 + second) / SECONDS_PER_DAY


def _clock_elsewhere(header: Header, words: Mapping[str, list[str]], notes: list[str]) -> tuple[str, str]:
    for keyword in words["of_day"]:
        text = header.text(keyword)
        if re.match(r"^\d{1,2}:\d", text) and not _says_local(header, keyword, notes):
            return text, keyword
    return "", ""


def _day(text: str, keyword: str, notes: list[str]) -> float | None:
    match = _DATE.match(text)
    old = _OLD_DATE.match(text)
    try:
        if match is not None:
            day = date(int(match[1]), int(match[2]), int(match[3]))
        elif old is not None:
            if int(old[3]) < FIRST_CAMERA_YEAR:
                notes.append(f"{keyword} = {text} would be a year of the 1900s before electronic cameras.")
                return None
            day = date(1900 + int(old[3]), int(old[2]), int(old[1]))
        else:
            return None
    except ValueError:
        return None
    if old is not None:
        notes.append(f"{keyword} = {text} is the old form DD/MM/YY of the 1900s.")
    elif "/" in text:
        notes.append(f"{keyword} is written with strokes; it was read as year/month/day.")
    return float(day.toordinal() - _MJD_ZERO)
