"""One connection to the logbook's file: journal, migrations with a backup, transactions, plain errors."""

from __future__ import annotations

import os
import sqlite3
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

from reduce.logbook.schema import APPLICATION_ID, MIGRATIONS
from reduce.plain_text import PlainError, clean_text

BUSY_TIMEOUT_S = 5.0
NETWORK_FILE_SYSTEMS = (
    "nfs",
    "cifs",
    "smb",
    "fuse",
    "9p",
    "afs",
    "ceph",
    "gluster",
    "lustre",
    "ncp",
    "sshfs",
)
"""Beginnings of the types in /proc/mounts whose shared memory SQLite's write-ahead log cannot trust."""


class LogbookError(PlainError):
    """The logbook cannot be used; the message is one sentence: which file, what is wrong, what to do."""


def system_mounts() -> str:
    """The kernel's table of mounts, empty where there is none."""
    try:
        return Path("/proc/mounts").read_text(errors="surrogateescape")
    except OSError:
        return ""


def file_system_of(folder: Path, mounts: str) -> str:
    """Type of the file system that holds a folder, '' when the table does not tell."""
    place = folder.resolve()
    best, kind = -1, ""
    for line in mounts.splitlines():
        parts = line.split()
        if len(parts) < 3:
            continue
        point = Path(parts[1].replace("\\040", " "))
        if place.is_relative_to(point) and len(point.parts) >= best:
            best, kind = len(point.parts), parts[2]
    return kind


def _sentence(path: Path, error: sqlite3.Error | OSError) -> str:
    shown = clean_text(path, 300)
    name = getattr(error, "sqlite_errorname", "") or ""
    if isinstance(error, OSError):
        return f"{shown} cannot be written: {clean_text(error.strerror or error)}; nothing was changed."
    if name.startswith(("SQLITE_FULL", "SQLITE_IOERR")):
        return f"{shown} could not be written, the disk may be full; nothing was changed: make room, then go on."
    if name.startswith(("SQLITE_BUSY", "SQLITE_LOCKED")):
        return f"{shown} is being written by another program for longer than {BUSY_TIMEOUT_S:g} s; try again."
    if name.startswith(("SQLITE_CORRUPT", "SQLITE_NOTADB")):
        return f"{shown} is damaged or not a logbook; put a backup in its place."
    if name.startswith(("SQLITE_READONLY", "SQLITE_CANTOPEN", "SQLITE_PERM", "SQLITE_AUTH")):
        return f"{shown} cannot be opened or written; check that the folder exists and its permissions."
    return f"{shown} refused the change: {clean_text(error)}."


class Database:
    """A connection that threads of one process may share; every method is one statement or one transaction.

    Parameters
    ----------
    path
        The file; it must exist unless ``create``.
    mounts
        Text in the form of /proc/mounts, to tell network file systems.
    migrations
        Scripts of `reduce.logbook.schema`.
    """

    def __init__(
        self,
        path: Path,
        *,
        create: bool = False,
        readonly: bool = False,
        mounts: Callable[[], str] = system_mounts,
        migrations: Sequence[str] = MIGRATIONS,
    ) -> None:
        self.path = path
        self.notice = ""
        """One sentence when something about the file's place is worth saying."""
        self._guard = threading.RLock()
        shown = clean_text(path, 300)
        if create and path.exists():
            raise LogbookError(f"{shown} exists already; open it, or choose another folder.")
        if not create and not path.is_file():
            raise LogbookError(f"{shown} does not exist; start a campaign in that folder first.")
        mode = "ro" if readonly else "rwc" if create else "rw"
        if readonly and not os.access(path.parent, os.W_OK):
            # Nobody can write here, and SQLite could not make the files that reading beside a writer needs.
            mode += "&immutable=1"
            self.notice = f"{shown} cannot be written here: it is shown as it is, nothing can be decided or noted."
        with self._plainly():
            self._connection = sqlite3.connect(
                f"{path.resolve().as_uri()}?mode={mode}", uri=True, timeout=BUSY_TIMEOUT_S,
                isolation_level=None, check_same_thread=False,
            )  # fmt: skip
        try:
            with self._plainly():
                self._prepare(create, readonly, mounts, migrations)
        except BaseException:
            self._connection.close()
            raise

    def _prepare(self, create: bool, readonly: bool, mounts: Callable[[], str], migrations: Sequence[str]) -> None:
        run = self._connection.execute
        shown = clean_text(self.path, 300)
        found, version = self._pragma("application_id"), self._pragma("user_version")
        if not create and found != APPLICATION_ID:
            raise LogbookError(f"{shown} is not a logbook; choose the folder of a campaign.")
        if version > len(migrations):
            raise LogbookError(
                f"{shown} was written by a newer version (form {version}, this one knows {len(migrations)}); "
                "update fadeline."
            )
        if readonly and version < len(migrations):
            raise LogbookError(f"{shown} has an older form; open the campaign once for writing to renew it.")
        kind = file_system_of(self.path.parent, mounts())
        run("PRAGMA recursive_triggers = ON")
        run("PRAGMA foreign_keys = ON")
        if readonly:
            run("PRAGMA query_only = ON")
            return
        if kind.startswith(NETWORK_FILE_SYSTEMS):
            run("PRAGMA journal_mode = DELETE")
            self.notice = (
                f"The logbook lies on a network file system ({clean_text(kind, 20)}): writing is slower and "
                "only one machine at a time should use it; a local disk is better."
            )
        else:
            run("PRAGMA journal_mode = WAL")
        run("PRAGMA synchronous = FULL")
        if create:
            run(f"PRAGMA application_id = {APPLICATION_ID}")
        elif version < len(migrations):
            self._back_up(version)
        for step in range(version, len(migrations)):
            self._migrate(step, migrations[step])

    def _pragma(self, name: str) -> int:
        return int(self._connection.execute(f"PRAGMA {name}").fetchone()[0])

    def _back_up(self, version: int) -> None:
        """A complete copy beside the file before its form changes; an older copy is kept."""
        name = f"{self.path.stem}-form-{version}"
        n = 1
        while (copy := self.path.with_name(f"{name}-{n}.backup")).exists():
            n += 1
        part = copy.with_suffix(".part")
        part.unlink(missing_ok=True)
        with closing(sqlite3.connect(part)) as target:
            self._connection.backup(target)
        part.replace(copy)

    def _migrate(self, step: int, script: str) -> None:
        try:
            self._connection.executescript(f"BEGIN IMMEDIATE;{script};PRAGMA user_version = {step + 1};COMMIT;")
        except sqlite3.Error:
            if self._connection.in_transaction:
                self._connection.execute("ROLLBACK")
            raise

    @contextmanager
    def _plainly(self) -> Iterator[None]:
        try:
            yield
        except (sqlite3.Error, OSError) as error:
            raise LogbookError(_sentence(self.path, error)) from error

    def rows(self, statement: str, values: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """All rows of a query."""
        with self._guard, self._plainly():
            return self._connection.execute(statement, values).fetchall()

    def row(self, statement: str, values: Sequence[Any] = ()) -> tuple[Any, ...] | None:
        """First row of a query."""
        with self._guard, self._plainly():
            found: tuple[Any, ...] | None = self._connection.execute(statement, values).fetchone()
            return found

    @contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """Everything inside is written, or nothing is.

        Raises
        ------
        LogbookError
            One sentence: the disk is full, another program holds the file, or a rule of the tables says no.
        """
        with self._guard, self._plainly():
            self._connection.execute("BEGIN IMMEDIATE")
            try:
                yield self._connection
                self._connection.execute("COMMIT")
            except BaseException:
                if self._connection.in_transaction:
                    self._connection.execute("ROLLBACK")
                raise

    def check(self) -> str:
        """'' when the file is sound, or one sentence."""
        try:
            found = self.rows("PRAGMA quick_check(1)")
        except LogbookError as error:
            return str(error)
        if found == [("ok",)]:
            return ""
        return f"{clean_text(self.path, 300)} is damaged ({clean_text(found[0][0])}); put a backup in its place."

    def close(self) -> None:
        """Close the connection; the file may then be copied."""
        with self._guard:
            self._connection.close()
