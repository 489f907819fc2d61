"""The standard band behind a filter's name, or none: an ambiguous name is not guessed."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from reduce.frames.header import Header
from reduce.records import BANDS, FrameKind

_LETTERS = re.compile(r"[^A-Za-z']+")


def band_of(
    header: Header,
    keywords: Mapping[str, list[str]],
    words: Mapping[str, Any],
    own_names: Mapping[str, str],
    kind: FrameKind,
    notes: list[str],
) -> tuple[str, str | None]:
    """Filter name as the header spells it, and band letter or None; a sentence in ``notes`` when it is not clear."""
    name = header.first_text(keywords["filter"])
    if _is_nothing(name, words):
        wheels = [text for text in map(header.text, keywords["filter_wheels"]) if not _is_nothing(text, words)]
        if len(set(wheels)) > 1:
            notes.append(f"two filters are in the beam ({' and '.join(wheels)}): no band.")
            return " + ".join(wheels), None
        name = wheels[0] if wheels else name
    if name in own_names:
        return name, own_names[name]
    if kind in ("bias", "dark"):
        return name, None
    if _is_nothing(name, words):
        notes.append(f"no filter was in the beam ({name}): no band." if name else "the header names no filter.")
        return name, None
    band = band_from_name(name, words)
    if band is None:
        notes.append(f"filter {name!r} has no standard band by its name; name it under [filters] in observatory.toml.")
    elif band in "RI" and "johnson" in name.casefold() and "cousins" not in name.casefold():
        notes.append(f"filter {name!r} was taken as Cousins {band}; Johnson's own {band} is redder.")
    return name, band


def _is_nothing(name: str, words: Mapping[str, Any]) -> bool:
    return name.casefold() in words["nothing"]


def band_from_name(name: str, words: Mapping[str, Any]) -> str | None:
    """Band letter of a filter name, None when the name does not settle it.

    A lone letter counts as written (``r`` is SDSS, ``R`` Landolt). A word of a system, or a prime, settles letters in
    either case.
    """
    exact: Mapping[str, str] = words["exact"]
    if name.strip() in exact:
        return exact[name.strip()]
    lower = name.casefold()
    primed = bool(re.search(r"[gri]['’′`]|[gri][\s_-]?prime", lower))
    systems = {
        system
        for system, key in (("landolt", "landolt_words"), ("sdss", "sdss_words"))
        if any(word in lower for word in words[key])
    }
    if primed:
        systems.add("sdss")
    if len(systems) > 1:
        return None
    rest = name
    for word in sorted([*words["landolt_words"], *words["sdss_words"], "prime"], key=len, reverse=True):
        rest = re.sub(re.escape(word), " ", rest, flags=re.IGNORECASE)
    parts = [part.replace("'", "") for part in _LETTERS.split(re.sub("[’′`]", "'", rest))]
    idle = {*words["idle_words"], *words["nothing"]}
    parts = [part for part in parts if part and part.casefold() not in idle]
    if len(parts) != 1:
        return None
    letter = exact.get(parts[0], parts[0])
    if not systems:
        return letter if letter in BANDS else None
    letter = letter.lower() if systems == {"sdss"} else letter.upper()
    return letter if letter in (("g", "r", "i") if systems == {"sdss"} else ("B", "V", "R", "I")) else None
