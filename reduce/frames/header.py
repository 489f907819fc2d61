"""Cards of a header, read with suspicion: values of any type, texts escaped, numbers finite."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from reduce.plain_text import clean_text

CardValue = str | int | float | bool | None
_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d+)?)\s*([A-Za-z/%\"'-]*)\s*$")


@dataclass(frozen=True, slots=True)
class Header:
    """Keyword → value, and the comments that sometimes hold the unit."""

    values: Mapping[str, CardValue]
    comments: Mapping[str, str] = field(default_factory=dict)
    history: tuple[str, ...] = ()
    """Lines of HISTORY and COMMENT."""

    def __contains__(self, keyword: str) -> bool:
        return self.values.get(keyword) not in (None, "")

    def text(self, keyword: str) -> str:
        """The value as one clean line; '' when absent."""
        value = self.values.get(keyword)
        return "" if value is None or isinstance(value, bool) else clean_text(value)

    def first_text(self, keywords: list[str]) -> str:
        """The first that is not empty."""
        return next((text for text in map(self.text, keywords) if text), "")

    def comment(self, keyword: str) -> str:
        """The comment as one clean line."""
        return clean_text(self.comments.get(keyword, ""))

    def number(self, keyword: str) -> float | None:
        """A finite number, also one written as text with a unit behind it ("60.0 s")."""
        value = self.values.get(keyword)
        if isinstance(value, bool) or value is None:
            return None
        if isinstance(value, str):
            match = _NUMBER.match(value)
            if match is None:
                return None
            value = match[1].replace("d", "e").replace("D", "e")
        try:
            number = float(value)
        except (OverflowError, ValueError):
            return None
        return number if math.isfinite(number) else None

    def numbers(self, keywords: list[str]) -> Iterator[tuple[str, float]]:
        """Keyword and number of those that hold one."""
        for keyword in keywords:
            number = self.number(keyword)
            if number is not None:
                yield keyword, number
