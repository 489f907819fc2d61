"""Targets' measurements that were freed of their host's light, beside those that the frames gave."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reduce.logbook.database import Database
from reduce.logbook.packing import from_plain, pack_stars, to_json, unpack_stars
from reduce.records import STAR_DTYPE, HostLight


@dataclass(frozen=True, slots=True)
class HostRow:
    """One target on one frame without its host."""

    frame: str
    recipe: str
    target: str
    inputs: str
    """Digest of everything that it was made with, apart from the frame's own stamps."""
    host_light: HostLight
    star: NDArray[Any]
    """(1,) STAR_DTYPE; (0,) when it could not be done, the notes say why."""


class HostRows:
    """Reading and writing `HostRow`; a part of `reduce.logbook.store.Logbook`."""

    _database: Database
    _now: Callable[[], str]
    _new_id: Callable[[], str]

    def add_host_rows(self, rows: list[HostRow]) -> None:
        """Keep rows, in one transaction; one that is there already stays as it is."""
        values = []
        for row in rows:
            block, dtype = pack_stars(row.star) if len(row.star) else (b"", "[]")
            content = to_json(row.host_light)
            values.append((self._new_id(), row.frame, row.recipe, row.target, row.inputs, content, block, dtype,
                           self._now()))  # fmt: skip
        statement = "INSERT INTO host_light VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT DO NOTHING"
        with self._database.transaction() as write:
            write.executemany(statement, values)

    def host_rows_done(self) -> set[tuple[str, str, str, str]]:
        """(frame, recipe, target, inputs) of every stored row."""
        return set(self._database.rows("SELECT frame, recipe, target, inputs FROM host_light"))

    def host_rows(self, inputs: set[str]) -> dict[tuple[str, str, str, str], HostRow]:
        """Rows that were made with one of these inputs, by (frame, recipe, target, inputs)."""
        found = self._database.rows(
            "SELECT frame, recipe, target, inputs, content, star, star_dtype FROM host_light "
            "WHERE inputs IN (SELECT value FROM json_each(?))",
            (json.dumps(sorted(inputs)),),
        )
        return {
            (frame, recipe, target, made_with): HostRow(
                frame, recipe, target, made_with, from_plain(HostLight, json.loads(content)),
                unpack_stars(block, dtype) if block else np.zeros(0, STAR_DTYPE),
            )
            for frame, recipe, target, made_with, content, block, dtype in found
        }  # fmt: skip
