"""Text from headers, file names and catalogues made harmless before anyone shows or stores it."""

from __future__ import annotations

import unicodedata


def clean_text(text: object, limit: int = 200) -> str:
    """One line of printable text: control, format and surrogate characters become ``·``, blanks are folded.

    Escape sequences lose their escape character, so a terminal prints them as harmless letters. Markup is not
    touched here: faces print with markup switched off.
    """
    raw = str(text)[: 4 * limit]
    shown = "".join(
        " " if character in "\t\n\r" else character if unicodedata.category(character)[0] != "C" else "·"
        for character in raw
    )
    folded = " ".join(shown.split())
    return folded if len(folded) <= limit else folded[: limit - 1] + "…"
