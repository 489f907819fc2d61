"""The terminal as it really is: environment mended before the app starts."""

from __future__ import annotations

from collections.abc import Mapping, MutableMapping

_WEAK_TERMINALS = ("", "dumb", "unknown")


def prepare_environment(environ: MutableMapping[str, str]) -> None:
    """Mend what would spoil the app; call it before textual is imported.

    - ``COLUMNS`` and ``LINES`` would freeze the size for ever: removed.
    - Animations and smooth scrolling cost bytes on a slow link: off.
    - A terminal that says nothing of itself would be sent 24-bit colour: it gets none.
    - 256 colours are plenty here and half the bytes of 24-bit ones; an explicit wish is respected.
    """
    environ.pop("COLUMNS", None)
    environ.pop("LINES", None)
    environ["TEXTUAL_ANIMATIONS"] = "none"
    environ["TEXTUAL_SMOOTH_SCROLL"] = "0"
    if environ.get("TERM", "") in _WEAK_TERMINALS:
        environ.setdefault("NO_COLOR", "1")
    if environ.get("COLORTERM", "") in ("truecolor", "24bit") or "256" in environ.get("TERM", ""):
        environ.setdefault("TEXTUAL_COLOR_SYSTEM", "256")


def plain_characters(environ: Mapping[str, str]) -> bool:
    """True when only plain characters are safe: the locale is not UTF-8, or the terminal is a weak one."""
    locale = environ.get("LC_ALL") or environ.get("LC_CTYPE") or environ.get("LANG") or ""
    utf8 = "utf-8" in locale.lower() or "utf8" in locale.lower()
    return not utf8 or environ.get("TERM", "") in (*_WEAK_TERMINALS, "linux", "vt100")


def few_colours(environ: Mapping[str, str]) -> bool:
    """True when shades of grey cannot be shown: no colour, or sixteen of them."""
    if environ.get("NO_COLOR"):
        return True
    system = environ.get("TEXTUAL_COLOR_SYSTEM", "auto")
    if system != "auto":
        return system not in ("256", "truecolor")
    return "256" not in environ.get("TERM", "") and environ.get("COLORTERM", "") not in ("truecolor", "24bit")
