"""The logbook's tables: append-only facts, a few local tables, and the steps from one version to the next."""

from __future__ import annotations

APPLICATION_ID = 0x46414445
"""Written into the file's header: tells a logbook from any other SQLite file."""

APPEND_ONLY = (
    "frame", "location", "recipe", "master", "reduction", "sequence", "sequence_star", "target", "decision",
    "entry", "estimate", "setting", "host_light", "imported_point",
)  # fmt: skip
"""Tables that refuse UPDATE and DELETE."""

STAMPED = (*APPEND_ONLY, "problem")
"""Tables whose growth the faces follow."""

_TABLES = """
CREATE TABLE frame (
    id TEXT PRIMARY KEY,                 -- SHA-256 of the file
    header TEXT NOT NULL,                -- JSON
    first_seen TEXT NOT NULL             -- all times: UTC, ISO
);
CREATE TABLE location (
    id TEXT PRIMARY KEY,
    frame TEXT NOT NULL REFERENCES frame (id),
    path BLOB NOT NULL,                  -- as the file system spells it: not always text
    size INTEGER NOT NULL,
    mtime_ns INTEGER NOT NULL,
    seen_at TEXT NOT NULL
);
CREATE INDEX location_of_path ON location (path);
CREATE TABLE recipe (id TEXT PRIMARY KEY, content TEXT NOT NULL, at TEXT NOT NULL);
CREATE TABLE master (
    id TEXT PRIMARY KEY,                 -- digest
    kind TEXT NOT NULL,
    content TEXT NOT NULL,               -- JSON
    inputs TEXT NOT NULL,                -- JSON: frame ids
    at TEXT NOT NULL
);
CREATE TABLE reduction (
    id TEXT PRIMARY KEY,
    frame TEXT NOT NULL REFERENCES frame (id),
    recipe TEXT NOT NULL,
    outcome TEXT NOT NULL CHECK (outcome IN ('measured', 'no match', 'unreadable')),
    reason TEXT NOT NULL,
    band TEXT, camera TEXT, mjd_mid REAL, bjd_tdb REAL, airmass REAL,
    info TEXT, quality TEXT, solution TEXT,     -- JSON of the records of the same name
    stars BLOB NOT NULL,                 -- packed little-endian rows
    stars_dtype TEXT NOT NULL,           -- JSON: numpy's description of one row
    growth TEXT NOT NULL,                -- JSON: [magnitudes, errors]
    stamps TEXT NOT NULL,                -- digest of the stamp pack, '' without
    seconds REAL NOT NULL,
    at TEXT NOT NULL,
    UNIQUE (frame, recipe)
);
CREATE TABLE sequence (id TEXT PRIMARY KEY, name TEXT NOT NULL, bands TEXT NOT NULL, at TEXT NOT NULL);
CREATE TABLE sequence_star (
    sequence TEXT NOT NULL REFERENCES sequence (id),
    n INTEGER NOT NULL,
    id TEXT NOT NULL,
    ra_deg REAL NOT NULL,
    dec_deg REAL NOT NULL,
    mag TEXT NOT NULL,                   -- JSON: band -> [magnitude, error]
    PRIMARY KEY (sequence, n)
);
CREATE TABLE target (
    id TEXT PRIMARY KEY,
    name TEXT NOT NULL,
    content TEXT NOT NULL,               -- JSON of records.Target
    at TEXT NOT NULL,
    supersedes TEXT REFERENCES target (id)
);
CREATE TABLE decision (
    id TEXT PRIMARY KEY,
    subject TEXT NOT NULL,               -- JSON list: logbook.decisions
    aspect TEXT NOT NULL,
    value TEXT NOT NULL,
    reason TEXT NOT NULL,
    who TEXT NOT NULL,
    at TEXT NOT NULL,
    undoes TEXT UNIQUE REFERENCES decision (id)
);
CREATE TABLE entry (
    id TEXT PRIMARY KEY,
    target TEXT NOT NULL,
    night TEXT NOT NULL,
    kind TEXT NOT NULL,
    body TEXT NOT NULL,
    who TEXT NOT NULL,
    at TEXT NOT NULL,
    corrects TEXT REFERENCES entry (id)
);
CREATE TABLE estimate (
    id TEXT PRIMARY KEY,
    target TEXT NOT NULL,
    inputs_digest TEXT NOT NULL,
    mu REAL, mu_err REAL,
    content TEXT NOT NULL,               -- JSON of records.Estimate
    why TEXT NOT NULL,
    at TEXT NOT NULL
);
CREATE INDEX estimate_of_target ON estimate (target, inputs_digest);
CREATE TABLE setting (id TEXT PRIMARY KEY, key TEXT NOT NULL, value TEXT NOT NULL, at TEXT NOT NULL);

-- local to this machine, no part of the record of the nights
CREATE TABLE attempt (
    id TEXT PRIMARY KEY,
    frame TEXT NOT NULL,
    recipe TEXT NOT NULL,
    started_at TEXT NOT NULL,
    pid INTEGER NOT NULL,
    outcome TEXT NOT NULL DEFAULT ''     -- '' while running, or when the process died with it
);
CREATE INDEX attempt_of_frame ON attempt (frame, recipe);
CREATE TABLE problem (
    id TEXT PRIMARY KEY,
    path BLOB NOT NULL,
    size INTEGER NOT NULL,
    mtime_ns INTEGER NOT NULL,
    sentence TEXT NOT NULL,              -- '' when it is over
    at TEXT NOT NULL
);
CREATE VIRTUAL TABLE log_text USING fts5 (id UNINDEXED, words);

CREATE VIEW newest AS
    SELECT rowid AS row, * FROM reduction WHERE rowid IN (SELECT max(rowid) FROM reduction GROUP BY frame);
CREATE VIEW standing AS
    SELECT rowid AS row, * FROM decision
    WHERE undoes IS NULL AND id NOT IN (SELECT undoes FROM decision WHERE undoes IS NOT NULL);
CREATE VIEW decided AS
    SELECT * FROM standing WHERE row IN (SELECT max(row) FROM standing GROUP BY subject, aspect);
"""


def _guards(tables: tuple[str, ...]) -> str:
    return "".join(
        f"CREATE TRIGGER {table}_no_{verb} BEFORE {verb} ON {table} "
        f"BEGIN SELECT RAISE(ABORT, 'the logbook only gains rows'); END;\n"
        for table in tables
        for verb in ("update", "delete")
    )


_HOST_LIGHT = """
CREATE TABLE host_light (
    id TEXT PRIMARY KEY,
    frame TEXT NOT NULL REFERENCES frame (id),
    recipe TEXT NOT NULL,                -- of the measurement whose stamps were used
    target TEXT NOT NULL,
    inputs TEXT NOT NULL,                -- digest: method, host position, reference frames, version
    content TEXT NOT NULL,               -- JSON of records.HostLight
    star BLOB NOT NULL,                  -- the target's row without its host, packed as in reduction; empty: refused
    star_dtype TEXT NOT NULL,
    at TEXT NOT NULL,
    UNIQUE (frame, recipe, target, inputs)
);
"""

_IMPORTED_POINT = """
CREATE TABLE imported_point (
    id TEXT PRIMARY KEY,
    target TEXT NOT NULL,
    source TEXT NOT NULL,                -- the observatory that measured it
    digest TEXT NOT NULL UNIQUE,         -- of the content: the same point is kept once
    content TEXT NOT NULL,               -- JSON of records.Point
    at TEXT NOT NULL
);
"""

_LATER = ("host_light", "imported_point")

MIGRATIONS: tuple[str, ...] = (
    _TABLES + _guards(tuple(table for table in APPEND_ONLY if table not in _LATER)),
    _HOST_LIGHT + _guards(("host_light",)),
    _IMPORTED_POINT + _guards(("imported_point",)),
)
"""Script ``n`` leads from version n to n + 1; never change one that was released, add one."""
