"""What can be decided, how it is written down, and the choices that follow."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import get_args

from reduce.records import BANDS, LADDER_FWHM, Choices, FrameState, HostMethod

STATE = "state"
"""Aspect of a frame: kept, doubtful, dropped; empty: as the program judges."""
SET_ASIDE = "set aside"
"""Aspect of a comparison star: yes or empty."""
APERTURE = "aperture"
"""Aspect of a band: radius in FWHM, one of records.LADDER_FWHM, or 0 for the PSF; empty: by signal-to-noise."""
EXCLUDED = "excluded"
"""Aspect of a nightly point: yes or empty."""
HOST = "host light"
"""Aspect of a target: one of records.HostMethod; empty: the best there is."""


@dataclass(frozen=True, slots=True)
class Decision:
    """One row of the decision table."""

    id: str
    subject: str
    aspect: str
    value: str
    reason: str
    who: str
    at: str
    undoes: str | None = None


def frame_subject(frame: str) -> str:
    """Subject of decisions about a frame id."""
    return json.dumps(["frame", frame])


def frames_subject(frames: Iterable[str]) -> str:
    """Subject of one decision about several frame ids."""
    return json.dumps(["frames", *frames])


def star_subject(star: str) -> str:
    """Subject of decisions about a comparison star of the sequence."""
    return json.dumps(["star", star])


def band_subject(band: str) -> str:
    """Subject of decisions about a band."""
    return json.dumps(["band", band])


def point_subject(target: str, night: str, band: str) -> str:
    """Subject of decisions about one nightly point."""
    return json.dumps(["point", target, night, band])


def target_subject(target: str) -> str:
    """Subject of decisions about a target."""
    return json.dumps(["target", target])


def mistake_in(subject: str, aspect: str, value: str) -> str:
    """'' when a decision can be applied, otherwise what is wrong with it."""
    try:
        parts = json.loads(subject)
    except ValueError:
        return "its subject is not one that a function of this module makes"
    allowed: Mapping[tuple[str, str, int], tuple[str, ...]] = {
        ("frame", STATE, 2): get_args(FrameState),
        ("frames", STATE, 2): get_args(FrameState),
        ("star", SET_ASIDE, 2): ("yes",),
        ("band", APERTURE, 2): tuple(f"{radius:g}" for radius in (0.0, *LADDER_FWHM)),
        ("point", EXCLUDED, 4): ("yes",),
        ("target", HOST, 2): get_args(HostMethod),
    }
    if isinstance(parts, list) and parts[:1] == ["frames"] and len(parts) > 1:
        parts = parts[:2]  # as many as there are
    key = (parts[0], aspect, len(parts)) if isinstance(parts, list) and parts else ("", aspect, 0)
    if key not in allowed:
        return f"a {key[0] or 'thing'} has no {aspect}"
    if key[0] == "band" and parts[1] not in BANDS:
        return f"{parts[1]!r} is not one of the bands {' '.join(BANDS)}"
    if value and value not in allowed[key]:
        return f"{value!r} is not one of {', '.join(allowed[key])}"
    return ""


def target_and_night(subject: str) -> tuple[str, str]:
    """Target and night that a decision is about; empty where it concerns all."""
    parts = json.loads(subject)
    if parts[0] == "target":
        return parts[1], ""
    return (parts[1], parts[2]) if parts[0] == "point" else ("", "")


def words_of(decision: Decision, file_names: Mapping[str, str]) -> str:
    """A decision in words; ``file_names`` gives the file of a frame id."""
    parts = json.loads(decision.subject)
    value = decision.value
    if parts[0] == "frame":
        name = file_names.get(parts[1], parts[1][:12])
        said = f"frame {name} {value}" if value else f"frame {name} as judged by the program"
    elif parts[0] == "frames":
        names = [file_names.get(frame, frame[:12]) for frame in parts[1:]]
        said = f"{len(names)} frames {value or 'as judged by the program'} ({names[0]} to {names[-1]})"
    elif parts[0] == "star":
        said = f"star {parts[1]} {'set aside' if value else 'no longer set aside'}"
    elif parts[0] == "band":
        way = "PSF" if value == "0" else f"{value} FWHM"
        said = f"aperture in {parts[1]} {way if value else 'chosen by signal-to-noise'}"
    elif parts[0] == "target":
        said = f"host light of {parts[1]}: {value or 'by the best way there is'}"
    else:
        said = f"point {parts[1]} {parts[2]} {parts[3]} {'excluded' if value else 'no longer excluded'}"
    return f"taken back: {said}" if decision.undoes else said


def choices_from(decided: Iterable[Decision]) -> Choices:
    """The choices that the standing decisions add up to: one for a subject and aspect, in the order they were taken."""
    aperture: dict[str, float] = {}
    aside: set[str] = set()
    states: dict[str, FrameState] = {}
    excluded: set[tuple[str, str, str]] = set()
    hosts: dict[str, HostMethod] = {}
    for decision in decided:
        parts = json.loads(decision.subject)
        if parts[0] in ("frame", "frames"):
            for frame in parts[1:]:  # a frame may have been decided on by itself before, or after
                states.pop(frame, None)
                if decision.value:
                    states[frame] = decision.value  # type: ignore[assignment]
        elif not decision.value:
            continue
        elif parts[0] == "star":
            aside.add(parts[1])
        elif parts[0] == "band":
            aperture[parts[1]] = float(decision.value)
        elif parts[0] == "target":
            hosts[parts[1]] = decision.value  # type: ignore[assignment]
        else:
            excluded.add((parts[1], parts[2], parts[3]))
    return Choices(
        aperture_fwhm=aperture,
        stars_set_aside=frozenset(aside),
        frame_states=states,
        excluded_points=frozenset(excluded),
        host_methods=hosts,
    )
