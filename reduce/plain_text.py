"""Plain words: text from outside made harmless, and the base of all errors that are one sentence."""

from __future__ import annotations

import unicodedata


class PlainError(Exception):
    """Something the user can act on; the message is one sentence: what is wrong, where, and what to do."""


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
