"""Local memory of the reducer: attempts at frames, and files that are not taken yet."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from reduce.logbook.database import Database
from reduce.plain_text import clean_text


@dataclass(frozen=True, slots=True)
class Problem:
    """Why a file is not taken yet."""

    size: int
    mtime_ns: int
    sentence: str


class Arrivals:
    """A part of `reduce.logbook.store.Logbook`."""

    _database: Database
    _now: Callable[[], str]
    _new_id: Callable[[], str]

    def start_attempt(self, frame: str, recipe: str) -> int:
        """Count an attempt before it starts; the number of attempts that did not end well, with this one."""
        with self._database.transaction() as write:
            values = (self._new_id(), frame, recipe, self._now(), os.getpid())
            write.execute("INSERT INTO attempt (id, frame, recipe, started_at, pid) VALUES (?, ?, ?, ?, ?)", values)
            return self.attempts(frame, recipe)

    def end_attempt(self, frame: str, recipe: str, outcome: str) -> None:
        """How the newest attempt ended; "done" and "stopped" (by a person) do not count against the frame."""
        with self._database.transaction() as write:
            write.execute(
                "UPDATE attempt SET outcome = ? WHERE rowid = "
                "(SELECT max(rowid) FROM attempt WHERE frame = ? AND recipe = ?)",
                (clean_text(outcome), frame, recipe),
            )

    def attempts(self, frame: str, recipe: str) -> int:
        """Attempts that did not end well, one that still runs included."""
        row = self._database.row(
            "SELECT count(*) FROM attempt WHERE frame = ? AND recipe = ? AND outcome NOT IN ('done', 'stopped')",
            (frame, recipe),
        )
        return int(row[0]) if row else 0

    def add_problem(self, path: Path, size: int, mtime_ns: int, sentence: str) -> bool:
        """Why a file is not taken; an empty sentence ends the problem. False when nothing changed."""
        place, text = os.fsencode(path), clean_text(sentence, 500)
        with self._database.transaction() as write:
            newest = write.execute(
                "SELECT size, mtime_ns, sentence FROM problem WHERE path = ? ORDER BY rowid DESC LIMIT 1",
                (place,),
            ).fetchone()
            if newest == (size, mtime_ns, text) or (newest is None and not text):
                return False
            values = (self._new_id(), place, size, mtime_ns, text, self._now())
            write.execute("INSERT INTO problem VALUES (?, ?, ?, ?, ?, ?)", values)
            return True

    def problems(self) -> dict[Path, Problem]:
        """Files that are not taken, and why."""
        rows = self._database.rows("SELECT path, size, mtime_ns, sentence FROM problem ORDER BY rowid")
        newest = {Path(os.fsdecode(path)): Problem(*rest) for path, *rest in rows}
        return {path: problem for path, problem in newest.items() if problem.sentence}
