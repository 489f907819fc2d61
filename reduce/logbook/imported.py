"""Points that other observatories measured, beside those of our own frames."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Sequence

from reduce.logbook.database import Database
from reduce.logbook.packing import from_plain, to_json
from reduce.records import Point


class ImportedPoints:
    """Reading and writing imported points; a part of `reduce.logbook.store.Logbook`."""

    _database: Database
    _now: Callable[[], str]
    _new_id: Callable[[], str]

    def add_imported(self, points: Sequence[Point]) -> int:
        """Keep points, in one transaction; how many were new, as the same point is kept once."""
        rows = []
        for point in points:
            content = to_json(point)
            digest = hashlib.sha256(content.encode()).hexdigest()
            rows.append((self._new_id(), point.star, point.source, digest, content, self._now()))
        with self._database.transaction() as write:
            statement = "INSERT INTO imported_point VALUES (?, ?, ?, ?, ?, ?) ON CONFLICT DO NOTHING"
            return sum(write.execute(statement, row).rowcount for row in rows)

    def imported(self) -> list[Point]:
        """All imported points, in the order they came."""
        rows = self._database.rows("SELECT content FROM imported_point ORDER BY rowid")
        return [from_plain(Point, json.loads(content)) for (content,) in rows]
