"""What was recognised in a folder of frames, in lines."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

from rich.text import Text

if TYPE_CHECKING:
    from reduce.views import FolderSurvey

_KINDS = (("light", "lights"), ("bias", "biases"), ("dark", "darks"), ("flat", "flats"), ("unknown", "not used"))
_MOST_OBJECTS = 6


def counts_text(kinds: Mapping[str, int]) -> str:
    """How many files of each kind."""
    return ", ".join(f"{kinds[kind]} {words}" for kind, words in _KINDS if kinds.get(kind)) or "no frames yet"


def survey_text(survey: FolderSurvey) -> Text:
    """Counts, nights, cameras, objects; then what is missing."""
    nights = " to ".join(survey.nights)
    lines = [Text.assemble(("Frames   ", "bold"), counts_text(survey.kinds), f"  ({nights})" if nights else "")]
    lines += [Text.assemble(("Camera   ", "bold"), camera) for camera in survey.cameras[:2]]
    names = [f"{row.name} ({row.n_frames})" for row in survey.objects]
    if names:
        more = f" and {len(names) - _MOST_OBJECTS} more" if len(names) > _MOST_OBJECTS else ""
        lines.append(Text.assemble(("Objects  ", "bold"), ", ".join(names[:_MOST_OBJECTS]) + more))
    lines += [Text(f"! {sentence}") for sentence in survey.missing]
    if survey.unusable:
        more = f" (and {len(survey.unusable) - 1} more)" if len(survey.unusable) > 1 else ""
        lines.append(Text(f"! {survey.unusable[0]}{more}"))
    return Text("\n").join(lines)
