"""The logbook: what was seen, measured, decided, noted and estimated; it only gains rows."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Self

import numpy as np

from reduce.logbook.arrivals import Arrivals
from reduce.logbook.database import Database, LogbookError, system_mounts
from reduce.logbook.host_light import HostRows
from reduce.logbook.ids import IdMaker, iso, utc_now
from reduce.logbook.imported import ImportedPoints
from reduce.logbook.log import Log
from reduce.logbook.packing import (
    REDUCTION_COLUMNS,
    estimate_from_json,
    from_plain,
    measured_from_row,
    optional,
    pack_stars,
    to_json,
)
from reduce.logbook.schema import STAMPED
from reduce.logbook.stamps import read_stamps, write_stamps
from reduce.plain_text import clean_text
from reduce.records import Estimate, FieldSolution, FrameInfo, Measured, Target
from reduce.records import Sequence as ComparisonSequence
from reduce.views import EstimateRow

FILE_NAME = "logbook.db"
LONGEST_HEADER_CARD = 500


@dataclass(frozen=True, slots=True)
class Location:
    """Where a frame's file was seen last."""

    frame: str
    size: int
    mtime_ns: int


@dataclass(frozen=True, slots=True)
class Master:
    """One master frame that was built."""

    digest: str
    kind: str
    content: Mapping[str, Any]
    inputs: tuple[str, ...]
    """Frame ids."""


class Logbook(Log, Arrivals, HostRows, ImportedPoints):
    """The logbook of one campaign folder; threads may share it. Every writing method is one transaction.

    Decisions, notes and searches are in `reduce.logbook.log.Log`, attempts and problems of files in
    `reduce.logbook.arrivals.Arrivals`, targets without their hosts in `reduce.logbook.host_light.HostRows`, points
    of other observatories in `reduce.logbook.imported.ImportedPoints`.
    All methods raise `LogbookError` with one sentence when the file cannot be read or written; then nothing was
    changed.
    """

    def __init__(self, folder: Path, database: Database, clock: Callable[[], datetime], new_id: IdMaker) -> None:
        super().__init__(database, lambda: iso(clock()), new_id, self.file_names)
        self.folder = folder
        self.readonly = False

    @classmethod
    def create(
        cls,
        folder: Path,
        *,
        clock: Callable[[], datetime] = utc_now,
        random: Callable[[int], bytes] = os.urandom,
        mounts: Callable[[], str] = system_mounts,
    ) -> Self:
        """A new logbook in a folder, which is made when missing; refuses a folder that has one."""
        try:
            folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            shown, why = clean_text(folder, 300), clean_text(error.strerror or error)
            raise LogbookError(f"{shown} cannot be made: {why}; choose another folder.") from error
        return cls(folder, Database(folder / FILE_NAME, create=True, mounts=mounts), clock, IdMaker(clock, random))

    @classmethod
    def open(
        cls,
        folder: Path,
        readonly: bool = False,
        *,
        clock: Callable[[], datetime] = utc_now,
        random: Callable[[int], bytes] = os.urandom,
        mounts: Callable[[], str] = system_mounts,
    ) -> Self:
        """The logbook of a folder; an older form is renewed, with a copy of the file first.

        A folder that cannot be written is opened for reading; `readonly` says so.
        """
        readonly = readonly or not os.access(folder, os.W_OK)
        database = Database(folder / FILE_NAME, readonly=readonly, mounts=mounts)
        book = cls(folder, database, clock, IdMaker(clock, random))
        book.readonly = readonly
        return book

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._database.close()

    @property
    def notice(self) -> str:
        """One sentence on the file's place, '' when all is well."""
        return self._database.notice

    def check(self) -> str:
        """'' when the file is sound, or one sentence."""
        return self._database.check()

    def stamp(self) -> int:
        """Grows with every change that faces show, whoever made it; cheap enough to poll."""
        return self._rows_in(STAMPED)

    def measured_stamp(self) -> int:
        """Grows with every change that light curves rest on: all of them but estimates and lines of the log."""
        return self._rows_in(tuple(table for table in STAMPED if table not in ("estimate", "entry")))

    def _rows_in(self, tables: tuple[str, ...]) -> int:
        total = " + ".join(f"(SELECT coalesce(max(rowid), 0) FROM {table})" for table in tables)
        row = self._database.row(f"SELECT {total}")
        return int(row[0]) if row else 0

    # ---- frames ------------------------------------------------------------------------------------------

    def add_frame(self, frame: str, header: Mapping[str, object]) -> bool:
        """A file's content, by its SHA-256; False when it is known already."""
        cards = {
            clean_text(key, 80): value
            if value is None or isinstance(value, (bool, int, float))
            else clean_text(value, LONGEST_HEADER_CARD)
            for key, value in header.items()
        }
        with self._database.transaction() as write:
            found = write.execute(
                "INSERT INTO frame VALUES (?, ?, ?) ON CONFLICT DO NOTHING",
                (frame, to_json(cards), self._now()),
            )
            return found.rowcount == 1

    def header(self, frame: str) -> dict[str, Any]:
        """Header of a frame as stored; empty for an unknown one."""
        row = self._database.row("SELECT header FROM frame WHERE id = ?", (frame,))
        return dict(json.loads(row[0])) if row else {}

    def add_location(self, frame: str, path: Path, size: int, mtime_ns: int) -> bool:
        """Where a frame lies; False when this is known already."""
        place = os.fsencode(path)
        with self._database.transaction() as write:
            newest = write.execute(
                "SELECT frame, size, mtime_ns FROM location WHERE path = ? ORDER BY rowid DESC LIMIT 1",
                (place,),
            ).fetchone()
            if newest == (frame, size, mtime_ns):
                return False
            values = (self._new_id(), frame, place, size, mtime_ns, self._now())
            write.execute("INSERT INTO location VALUES (?, ?, ?, ?, ?, ?)", values)
            return True

    def known_locations(self) -> dict[Path, Location]:
        """Path → what was seen there last, in the order of first sight."""
        rows = self._database.rows("SELECT path, frame, size, mtime_ns FROM location ORDER BY rowid")
        return {Path(os.fsdecode(path)): Location(*rest) for path, *rest in rows}

    def file_names(self) -> dict[str, str]:
        """Frame id → file name without folder, escaped."""
        return {place.frame: clean_text(path.name) for path, place in self.known_locations().items()}

    def add_recipe(self, digest: str, content: Mapping[str, Any]) -> bool:
        """What a recipe's digest stands for; False when it is known already."""
        with self._database.transaction() as write:
            values = (digest, to_json(content), self._now())
            return write.execute("INSERT INTO recipe VALUES (?, ?, ?) ON CONFLICT DO NOTHING", values).rowcount == 1

    def add_master(self, master: Master) -> bool:
        """A master frame that was built; False when it is known already."""
        values = (master.digest, master.kind, to_json(master.content), to_json(master.inputs), self._now())
        with self._database.transaction() as write:
            found = write.execute("INSERT INTO master VALUES (?, ?, ?, ?, ?) ON CONFLICT DO NOTHING", values)
            return found.rowcount == 1

    def masters(self) -> list[Master]:
        """All master frames, in the order they were built."""
        rows = self._database.rows("SELECT id, kind, content, inputs FROM master ORDER BY rowid")
        return [Master(d, kind, json.loads(content), tuple(json.loads(inputs))) for d, kind, content, inputs in rows]

    # ---- reductions --------------------------------------------------------------------------------------

    def add_reduction(self, measured: Measured) -> bool:
        """All that one frame gave; False when this frame has a row of this recipe (it then stays as it is).

        The frame must have been added. Stamps are on the disk before the row is.
        """
        stamps = write_stamps(self.folder, measured.stamps)
        info, quality, solution = measured.info, measured.quality, measured.solution
        stars, dtype = pack_stars(measured.stars)
        values = (
            self._new_id(), measured.frame, measured.recipe, measured.outcome,
            clean_text(measured.reason, 500),
            info and info.band, info and info.camera, info and info.mjd_mid, measured.bjd_tdb,
            quality and quality.airmass,
            info and to_json(info), quality and to_json(quality), solution and to_json(solution),
            stars, dtype, to_json([measured.growth_mag, measured.growth_err_mag]), stamps, measured.seconds,
            self._now(),
        )  # fmt: skip
        places = ", ".join("?" * len(values))
        statement = f"INSERT INTO reduction VALUES ({places}) ON CONFLICT (frame, recipe) DO NOTHING"
        with self._database.transaction() as write:
            return write.execute(statement, values).rowcount == 1

    def reductions_done(self) -> set[tuple[str, str]]:
        """(frame, recipe) of every stored reduction."""
        return {(frame, recipe) for frame, recipe in self._database.rows("SELECT frame, recipe FROM reduction")}

    def frames_measured(self) -> list[str]:
        """Every frame with a reduction, in the order of the first one."""
        return [
            frame for (frame,) in self._database.rows("SELECT frame FROM reduction GROUP BY frame ORDER BY min(rowid)")
        ]

    def unrecognised(self) -> set[tuple[str, str]]:
        """(frame, recipe) of every reduction that ended with "no match"."""
        rows = self._database.rows("SELECT frame, recipe FROM reduction WHERE outcome = 'no match'")
        return {(frame, recipe) for frame, recipe in rows}

    def first_solution(self, like: FrameInfo) -> FieldSolution | None:
        """Plate solution of the earliest frame of the same camera, size and binning that was recognised by itself.

        Frames recognised with its help do not count: the first of them would change what the others are measured with.
        """
        rows = self._database.rows(
            "SELECT info, solution FROM reduction WHERE outcome = 'measured' AND camera = ? AND recipe NOT IN "
            "(SELECT id FROM recipe WHERE json_extract(content, '$.camera') IS NOT NULL) ORDER BY mjd_mid, frame",
            (like.camera,),
        )
        for info_text, solution_text in rows:
            info, solution = optional(FrameInfo, info_text), optional(FieldSolution, solution_text)
            if info is None or solution is None:
                continue
            if (info.nx, info.ny, info.binning) == (like.nx, like.ny, like.binning):
                return solution
        return None

    def newest_reductions(self, wanted: Mapping[str, str] | None = None) -> list[Measured]:
        """One reduction a frame, by mid-exposure: that of the wanted recipe if there is one, else the newest.

        Parameters
        ----------
        wanted
            Frame id → digest of the recipe it should have.

        Returns
        -------
        list of Measured
            Everything but the stamps (see `stamps`).
        """
        chosen = dict(self._database.rows("SELECT frame, row FROM newest"))
        if wanted:
            for frame, recipe, row in self._database.rows("SELECT frame, recipe, rowid FROM reduction"):
                if wanted.get(frame) == recipe:
                    chosen[frame] = row
        rows = self._database.rows(
            f"SELECT {REDUCTION_COLUMNS} FROM reduction WHERE rowid IN (SELECT value FROM json_each(?)) "
            "ORDER BY mjd_mid, frame",
            (json.dumps(sorted(chosen.values())),),
        )
        return [measured_from_row(row) for row in rows]

    def stamps(self, frame: str, recipe: str) -> bytes:
        """Stamp pack of a reduction, b"" when it has none."""
        row = self._database.row("SELECT stamps FROM reduction WHERE frame = ? AND recipe = ?", (frame, recipe))
        return read_stamps(self.folder, row[0]) if row else b""

    # ---- sequence, targets, settings ---------------------------------------------------------------------

    def add_sequence(self, sequence: ComparisonSequence) -> bool:
        """A comparison sequence; the one added last is current. False when it equals the current one."""
        bands = sorted(sequence.mag)
        stars = [
            (n, star, float(sequence.ra_deg[n]), float(sequence.dec_deg[n]),
             to_json({band: [sequence.mag[band][n], sequence.mag_err[band][n]] for band in bands}))
            for n, star in enumerate(sequence.ids)
        ]  # fmt: skip
        content = to_json([sequence.name, bands, stars])
        with self._database.transaction() as write:
            newest = write.execute("SELECT id FROM sequence ORDER BY rowid DESC LIMIT 1").fetchone()
            digest = hashlib.sha256(content.encode()).hexdigest()
            if newest and newest[0].startswith(digest):
                return False
            key = f"{digest}-{self._new_id()}"
            write.execute("INSERT INTO sequence VALUES (?, ?, ?, ?)", (key, sequence.name, to_json(bands), self._now()))
            write.executemany("INSERT INTO sequence_star VALUES (?, ?, ?, ?, ?, ?)", [(key, *star) for star in stars])
            return True

    def sequence_id(self) -> str:
        """Id of the comparison sequence in force, '' without one."""
        row = self._database.row("SELECT id FROM sequence ORDER BY rowid DESC LIMIT 1")
        return str(row[0]) if row else ""

    def current_sequence(self) -> ComparisonSequence | None:
        """The comparison sequence added last."""
        return self.sequence_by_id(self.sequence_id())

    def sequence_by_id(self, key: str) -> ComparisonSequence | None:
        """One of the sequences that were ever in force."""
        row = self._database.row("SELECT id, name, bands FROM sequence WHERE id = ?", (key,))
        if row is None:
            return None
        stars = self._database.rows(
            "SELECT id, ra_deg, dec_deg, mag FROM sequence_star WHERE sequence = ? ORDER BY n", (row[0],)
        )
        mags = [json.loads(star[3]) for star in stars]

        def column(band: str, which: int) -> np.ndarray[Any, np.dtype[np.float64]]:
            return np.array([mag[band][which] for mag in mags], dtype=np.float64)

        bands = json.loads(row[2])
        return ComparisonSequence(
            name=row[1],
            ids=tuple(star[0] for star in stars),
            ra_deg=np.array([star[1] for star in stars], dtype=np.float64),
            dec_deg=np.array([star[2] for star in stars], dtype=np.float64),
            mag={band: column(band, 0) for band in bands},
            mag_err={band: column(band, 1) for band in bands},
        )

    def add_target(self, target: Target) -> bool:
        """A target, or new facts about the one of this name; False when nothing changed."""
        content = to_json(target)
        with self._database.transaction() as write:
            newest = write.execute(
                "SELECT id, content FROM target WHERE name = ? ORDER BY rowid DESC LIMIT 1", (target.name,)
            ).fetchone()
            if newest and newest[1] == content:
                return False
            values = (self._new_id(), target.name, content, self._now(), newest[0] if newest else None)
            write.execute("INSERT INTO target VALUES (?, ?, ?, ?, ?)", values)
            return True

    def targets(self) -> list[Target]:
        """What is followed, in the order it was first added, with the newest facts."""
        rows = self._database.rows("SELECT name, content FROM target ORDER BY rowid")
        return [from_plain(Target, json.loads(text)) for text in dict(rows).values()]

    def reference_folders_ever(self) -> set[str]:
        """Every folder that was ever named as a target's reference."""
        rows = self._database.rows("SELECT content FROM target")
        return {folder for (text,) in rows if (folder := json.loads(text).get("reference_folder"))}

    def set_setting(self, key: str, value: str) -> bool:
        """Remember a value; False when it is the present one."""
        if self.setting(key) == value:
            return False
        with self._database.transaction() as write:
            write.execute("INSERT INTO setting VALUES (?, ?, ?, ?)", (self._new_id(), key, value, self._now()))
            return True

    def setting(self, key: str) -> str | None:
        """The newest value of a key."""
        row = self._database.row("SELECT value FROM setting WHERE key = ? ORDER BY rowid DESC LIMIT 1", (key,))
        return str(row[0]) if row else None

    # ---- estimates ---------------------------------------------------------------------------------------

    def add_estimate(self, estimate: Estimate, inputs_digest: str, why: str) -> bool:
        """An estimate of the running history; False when the newest one has the same inputs."""
        with self._database.transaction() as write:
            newest = write.execute(
                "SELECT inputs_digest FROM estimate WHERE target = ? ORDER BY rowid DESC LIMIT 1",
                (estimate.target,),
            ).fetchone()
            if newest and newest[0] == inputs_digest:
                return False
            values = (self._new_id(), estimate.target, inputs_digest, estimate.mu, estimate.mu_err,
                      to_json(estimate), clean_text(why), self._now())  # fmt: skip
            write.execute("INSERT INTO estimate VALUES (?, ?, ?, ?, ?, ?, ?, ?)", values)
            return True

    def estimate(self, target: str, inputs_digest: str) -> Estimate | None:
        """The stored estimate of exactly these inputs."""
        row = self._database.row(
            "SELECT content FROM estimate WHERE target = ? AND inputs_digest = ? ORDER BY rowid DESC LIMIT 1",
            (target, inputs_digest),
        )
        return estimate_from_json(row[0]) if row else None

    def history(self, target: str) -> list[EstimateRow]:
        """The running estimates of a target, oldest first."""
        rows = self._database.rows("SELECT at, why, content FROM estimate WHERE target = ? ORDER BY rowid", (target,))
        keys = ("mu", "mu_err", "t_max", "dm15", "e_host", "chi2", "n")
        return [
            EstimateRow(made_at=at, why=why, **{key: data[key] for key in keys})
            for at, why, data in ((at, why, json.loads(content)) for at, why, content in rows)
        ]
