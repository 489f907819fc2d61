"""The observing log: decisions and their undo, notes, events, search."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Mapping

from reduce.logbook.database import Database, LogbookError
from reduce.logbook.decisions import Decision, choices_from, mistake_in, target_and_night, words_of
from reduce.plain_text import clean_text
from reduce.records import Choices
from reduce.views import LogRow

LONGEST_NOTE = 2000
DECISION_COLUMNS = "id, subject, aspect, value, reason, who, at, undoes"


class Log:
    """What people decide and write; a part of `reduce.logbook.store.Logbook`."""

    def __init__(
        self,
        database: Database,
        now: Callable[[], str],
        new_id: Callable[[], str],
        file_names: Callable[[], Mapping[str, str]],
    ) -> None:
        self._database, self._now, self._new_id, self._file_names = database, now, new_id, file_names

    # ---- decisions ---------------------------------------------------------------------------------------

    def decide(self, subject: str, aspect: str, value: str, reason: str, who: str) -> LogRow:
        """Write down a decision; see `reduce.logbook.decisions` for subjects and aspects.

        Raises
        ------
        LogbookError
            The decision cannot be applied to anything.
        """
        mistake = mistake_in(subject, aspect, value)
        if mistake:
            raise LogbookError(f"This decision cannot be taken: {clean_text(mistake)}.")
        with self._database.transaction() as write:
            return self._append(write, subject, aspect, value, reason, who, None)

    def can_undo(self) -> str:
        """The decision that `undo` would take back, in words; '' when there is none."""
        newest = self._newest_standing()
        return words_of(newest, self._file_names()) if newest else ""

    def undo(self, who: str) -> str:
        """Take back the newest standing decision by a row of its own; its words, '' when none is left."""
        with self._database.transaction() as write:
            newest = self._newest_standing()
            if newest is None:
                return ""
            row = self._append(write, newest.subject, newest.aspect, newest.value, "", who, newest.id)
        return row.body

    def decided(self) -> list[Decision]:
        """The decisions in force, one for a subject and aspect, in the order they were taken."""
        rows = self._database.rows(f"SELECT {DECISION_COLUMNS} FROM decided ORDER BY row")
        return [Decision(*row) for row in rows]

    def choices(self) -> Choices:
        """What the decisions in force add up to; second-order extinction is a setting."""
        return choices_from(self.decided())

    def _newest_standing(self) -> Decision | None:
        row = self._database.row(f"SELECT {DECISION_COLUMNS} FROM standing ORDER BY row DESC LIMIT 1")
        return Decision(*row) if row else None

    def _append(
        self,
        write: sqlite3.Connection,
        subject: str,
        aspect: str,
        value: str,
        reason: str,
        who: str,
        undoes: str | None,
    ) -> LogRow:
        decision = Decision(
            self._new_id(),
            subject,
            aspect,
            value,
            clean_text(reason, 500),
            clean_text(who, 60),
            self._now(),
            undoes,
        )
        write.execute(
            f"INSERT INTO decision ({DECISION_COLUMNS}) VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (decision.id, subject, aspect, value, decision.reason, decision.who, decision.at, undoes),
        )
        row = _decision_row(decision, self._file_names())
        self._index(write, row)
        return row

    # ---- notes and events --------------------------------------------------------------------------------

    def note(
        self,
        target: str,
        body: str,
        who: str,
        night: str = "",
        kind: str = "note",
        corrects: str | None = None,
    ) -> LogRow:
        """Write a note or an event; ``corrects`` names the entry that it replaces in the reader's mind.

        Raises
        ------
        LogbookError
            The note is empty, or the entry that it corrects does not exist.
        """
        row = LogRow(
            id=self._new_id(), at=self._now(), who=clean_text(who, 60), target=clean_text(target, 60),
            night=clean_text(night, 20), kind=clean_text(kind, 20), body=clean_text(body, LONGEST_NOTE),
        )  # fmt: skip
        if not row.body:
            raise LogbookError("The note is empty; write at least a word.")
        with self._database.transaction() as write:
            write.execute(
                "INSERT INTO entry (id, target, night, kind, body, who, at, corrects) VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
                (row.id, row.target, row.night, row.kind, row.body, row.who, row.at, corrects),
            )
            self._index(write, row)
        return row

    def log(
        self,
        search: str | None = None,
        target: str | None = None,
        night: str | None = None,
        kind: str | None = None,
        limit: int | None = None,
    ) -> list[LogRow]:
        """Lines of the log, oldest first; every filter given must hold.

        Parameters
        ----------
        search
            Words; a line holds all of them, each as the beginning of a word of its text, target or author.
        target
            Its lines, and those that concern all targets.
        limit
            At most this many, the newest.
        """
        found = None if search is None or not search.split() else self._search(search)
        rows = [row for row in self._all_rows() if found is None or row.id in found]
        rows = [
            row
            for row in rows
            if (target is None or row.target in (target, ""))
            and (night is None or row.night == night)
            and (kind is None or row.kind == kind)
        ]
        return rows[-limit:] if limit else rows

    def _all_rows(self) -> list[LogRow]:
        entries = self._database.rows("SELECT id, at, who, target, night, kind, body FROM entry")
        decisions = self._database.rows(f"SELECT {DECISION_COLUMNS} FROM decision")
        names = self._file_names() if decisions else {}
        rows = [LogRow(*row) for row in entries] + [_decision_row(Decision(*row), names) for row in decisions]
        return sorted(rows, key=lambda row: (row.at, row.id))

    def _search(self, search: str) -> set[str]:
        words = " ".join('"' + word.replace('"', '""') + '"*' for word in clean_text(search).split())
        return {id_ for (id_,) in self._database.rows("SELECT id FROM log_text WHERE log_text MATCH ?", (words,))}

    def rebuild_search(self) -> int:
        """Make the full-text index anew from the log; the number of lines."""
        with self._database.transaction() as write:
            rows = self._all_rows()
            write.execute("DELETE FROM log_text")
            for row in rows:
                self._index(write, row)
        return len(rows)

    @staticmethod
    def _index(write: sqlite3.Connection, row: LogRow) -> None:
        words = " ".join((row.body, row.target, row.night, row.kind, row.who))
        write.execute("INSERT INTO log_text (id, words) VALUES (?, ?)", (row.id, words))


def _decision_row(decision: Decision, file_names: Mapping[str, str]) -> LogRow:
    target, night = target_and_night(decision.subject)
    body = words_of(decision, file_names)
    return LogRow(
        id=decision.id, at=decision.at, who=decision.who, target=target, night=night,
        kind="undo" if decision.undoes else "decision",
        body=clean_text(f"{body}: {decision.reason}" if decision.reason else body, LONGEST_NOTE),
    )  # fmt: skip
