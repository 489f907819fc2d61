"""Decisions in the words of the faces, and as the logbook keeps them."""

from __future__ import annotations

from reduce.logbook.decisions import (
    APERTURE,
    EXCLUDED,
    HOST,
    SET_ASIDE,
    STATE,
    band_subject,
    frame_subject,
    frames_subject,
    point_subject,
    star_subject,
    target_subject,
)
from reduce.plain_text import PlainError, clean_text


class DecisionError(PlainError):
    """A decision that nobody can take."""


def decision_of(subject: str, aspect: str, value: str) -> tuple[str, str, str]:
    """Subject, aspect and value for `Logbook.decide`.

    Parameters
    ----------
    subject, aspect, value
        ``frame:<id>`` or ``frames:<id>,<id>…`` state keep|drop|auto; ``star:<id>`` use "set aside"|use;
        ``point:<target>:<night>:<band>``
        exclude yes|no; ``aperture:<band>`` fwhm <number>|auto; ``host:<target>`` method <records.HostMethod>|auto.
    """
    kind, _, rest = subject.partition(":")
    match kind, aspect, value:
        case "frame", "state", "keep" | "drop" | "auto":
            return frame_subject(rest), STATE, {"keep": "kept", "drop": "dropped", "auto": ""}[value]
        case "frames", "state", "keep" | "drop" | "auto":
            return frames_subject(rest.split(",")), STATE, {"keep": "kept", "drop": "dropped", "auto": ""}[value]
        case "star", "use", "set aside" | "use":
            return star_subject(rest), SET_ASIDE, "yes" if value == "set aside" else ""
        case "point", "exclude", "yes" | "no" if rest.count(":") >= 2:
            target, night, band = rest.rsplit(":", 2)
            return point_subject(target, night, band), EXCLUDED, "yes" if value == "yes" else ""
        case "aperture", "fwhm", _:
            return band_subject(rest), APERTURE, "" if value == "auto" else value
        case "host", "method", _:
            return target_subject(rest), HOST, "" if value == "auto" else value
    raise DecisionError(f"Nothing is known of {clean_text(subject)} {clean_text(aspect)} {clean_text(value)}.")
