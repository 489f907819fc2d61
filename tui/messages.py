"""What the app's workers tell it, and how an error is told in one sentence."""

from __future__ import annotations

from typing import TYPE_CHECKING

from textual.message import Message

from reduce.plain_text import PlainError, clean_text

if TYPE_CHECKING:
    from reduce.views import Snapshot


class SnapshotFetched(Message):
    """A new picture of the campaign; it makes older ones obsolete."""

    def __init__(self, snapshot: Snapshot) -> None:
        super().__init__()
        self.snapshot = snapshot

    def can_replace(self, message: Message) -> bool:
        """Skip pictures that were overtaken before they were drawn."""
        return isinstance(message, SnapshotFetched)


class Said(Message):
    """One sentence for the status line."""

    def __init__(self, sentence: str, trouble: bool = False, flash: bool = False) -> None:
        super().__init__()
        self.sentence = sentence
        self.trouble = trouble
        self.flash = flash
        """Shown reversed until the next words: what cannot be overlooked."""


def trouble_sentence(error: BaseException) -> str:
    """One sentence for any error; the project's own ones are sentences already."""
    if isinstance(error, PlainError):
        return str(error)
    return f"Something went wrong ({type(error).__name__}: {clean_text(error, 120)}); the logbook is safe."
