"""Where the telescope claims to point, in ICRS degrees; hours or degrees are decided by evidence, never by hope."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping

from reduce.frames.header import Header

_SEXAGESIMAL = re.compile(
    r"^\s*([+-]?)\s*(\d{1,3})\s*[:\sh°d]\s*(\d{1,2})\s*[:\sm']\s*(\d{1,2}(?:\.\d*)?)\s*[s\"]?\s*$", re.IGNORECASE
)
NEAR_DEG = 5.0
"""Two keywords of one header that agree so well speak of the same place."""
OLD_EQUINOX_YR = 0.5
"""An equinox that differs less from 2000 moves nothing that matters."""


def sexagesimal(text: str) -> float | None:
    """``±aa bb cc.c`` with blanks, colons or unit letters as a number of its first unit; None when it is none."""
    match = _SEXAGESIMAL.match(text)
    if match is None or int(match[3]) > 59 or float(match[4]) > 60:
        return None
    value = int(match[2]) + int(match[3]) / 60.0 + float(match[4]) / 3600.0
    return -value if match[1] == "-" else value


def position(
    header: Header, pairs: list[Mapping[str, str]], equinox_keywords: list[str], notes: list[str]
) -> tuple[float | None, float | None]:
    """(ra_deg, dec_deg) of the first pair of keywords that makes sense, or of the header's own sky coordinates."""
    for pair in pairs:
        dec_deg = _declination(header, pair["dec"])
        if dec_deg is None or pair["ra"] not in header:
            continue
        ra_deg = _right_ascension(header, pair["ra"], pair.get("unit", ""), dec_deg, pairs, notes)
        if ra_deg is not None:
            return _to_2000(ra_deg, dec_deg, header, equinox_keywords, notes)
    sky = _reference_position(header)
    return sky if sky is not None else (None, None)


def _declination(header: Header, keyword: str) -> float | None:
    value = sexagesimal(header.text(keyword))
    if value is None:
        value = header.number(keyword)
    return value if value is not None and abs(value) <= 90 else None


def _right_ascension(
    header: Header, keyword: str, unit: str, dec_deg: float, pairs: list[Mapping[str, str]], notes: list[str]
) -> float | None:
    text, comment = header.text(keyword), header.comment(keyword).casefold()
    value = sexagesimal(text)
    if value is not None:
        if value < 0 or value >= 360:
            return None
        if value >= 24 or unit == "degrees":
            notes.append(f"{keyword} = {text} is beyond 24 and was read as degrees.")
            return value
        return value * 15.0
    value = header.number(keyword)
    if value is None or not -180 <= value <= 360:
        return None
    if unit == "degrees" or value >= 24 or value < 0 or re.search(r"\bdeg|°", comment):
        return value % 360.0
    if re.search(r"\bhours?\b|\bhrs?\b|[\[(]h", comment):
        return value * 15.0
    for ra_deg, other_dec_deg in _other_positions(header, keyword, pairs):
        for candidate in (value, value * 15.0):
            if _separation_deg(candidate, dec_deg, ra_deg, other_dec_deg) < NEAR_DEG:
                return candidate
    notes.append(f"{keyword} = {text} may be hours or degrees and nothing in the header decides it; it was ignored.")
    return None


def _other_positions(header: Header, but: str, pairs: list[Mapping[str, str]]) -> Iterator[tuple[float, float]]:
    sky = _reference_position(header)
    if sky is not None:
        yield sky
    for pair in pairs:
        hours, dec_deg = sexagesimal(header.text(pair["ra"])), _declination(header, pair["dec"])
        if pair["ra"] != but and hours is not None and hours < 24 and dec_deg is not None:
            yield hours * 15.0, dec_deg


def _reference_position(header: Header) -> tuple[float, float] | None:
    """CRVAL of a header whose axes are right ascension and declination."""
    types = [header.text("CTYPE1").upper(), header.text("CTYPE2").upper()]
    for ra, dec in ((0, 1), (1, 0)):
        if types[ra].startswith("RA") and types[dec].startswith("DEC"):
            ra_deg, dec_deg = header.number(f"CRVAL{ra + 1}"), header.number(f"CRVAL{dec + 1}")
            if ra_deg is not None and dec_deg is not None and -180 <= ra_deg <= 360 and abs(dec_deg) <= 90:
                return ra_deg % 360.0, dec_deg
    return None


def _separation_deg(ra1: float, dec1: float, ra2: float, dec2: float) -> float:
    a, b = math.radians(dec1), math.radians(dec2)
    cosine = math.sin(a) * math.sin(b) + math.cos(a) * math.cos(b) * math.cos(math.radians(ra1 - ra2))
    return math.degrees(math.acos(max(-1.0, min(1.0, cosine))))


def _to_2000(
    ra_deg: float, dec_deg: float, header: Header, equinox_keywords: list[str], notes: list[str]
) -> tuple[float, float]:
    equinox = next((value for _, value in header.numbers(equinox_keywords) if 1800 < value < 2200), 2000.0)
    if abs(equinox - 2000.0) < OLD_EQUINOX_YR:
        return ra_deg, dec_deg
    import erfa

    matrix = erfa.pmat76(2451545.0, (equinox - 2000.0) * 365.25)
    ra, dec = erfa.c2s(matrix.T @ erfa.s2c(math.radians(ra_deg), math.radians(dec_deg)))
    notes.append(f"the position was brought from equinox {equinox:.1f} to 2000.")
    return math.degrees(ra) % 360.0, math.degrees(dec)
