"""How bands look: a letter first, and a colour of the Okabe & Ito palette, safe for colour-blind eyes."""

from __future__ import annotations

BAND_COLOURS = {
    "B": "#56b4e9",
    "V": "#009e73",
    "R": "#d55e00",
    "I": "#cc79a7",
    "g": "#0072b2",
    "r": "#e69f00",
    "i": "#f0e442",
}
"""Okabe & Ito (2008), "Color Universal Design": the seven that show on black."""

OTHER_COLOUR = "#bbbbbb"
STATE_COLOURS = {
    "done": "#009e73",
    "wants you": "#e69f00",
    "waiting": "#888888",
    "kept": "#009e73",
    "doubtful": "#e69f00",
    "dropped": "#d55e00",
    "used": "#009e73",
    "spare": "#888888",
    "set aside": "#e69f00",
    "excluded": "#e69f00",
}
"""Colour of a word; the word itself is always written too."""


def band_colour(band: str | None) -> str:
    """Colour of a band letter."""
    return BAND_COLOURS.get(band or "", OTHER_COLOUR)


def word_colour(word: str | None) -> str:
    """Colour of a state word."""
    return STATE_COLOURS.get(word or "", "")
