"""The tables of a results file, and the triggers that keep finished realisations as they are."""

from __future__ import annotations

__all__ = ["APPLICATION_ID", "PAGE_BYTES", "SCHEMA", "VERSION"]

APPLICATION_ID = 0x4C5A4E47
"""Tells a results file from SQLite files of other programs."""
VERSION = 1
"""Of the schema, SQLite's user_version; a test fails when the schema changes without it."""
PAGE_BYTES = 8192
"""Nine samples of eight regions fit into one page, with two per cent left over."""

_TABLES = (
    """CREATE TABLE versions (
    id INTEGER PRIMARY KEY,
    document TEXT NOT NULL UNIQUE
) STRICT""",
    """CREATE TABLE meta (
    id INTEGER PRIMARY KEY CHECK (id = 1),
    preset TEXT NOT NULL,
    identity TEXT NOT NULL,
    versions INTEGER NOT NULL REFERENCES versions,
    predicted TEXT NOT NULL,
    elapsed REAL NOT NULL
) STRICT""",
    """CREATE TABLE realisations (
    id INTEGER PRIMARY KEY,
    sprinkling INTEGER NOT NULL,
    realisation INTEGER NOT NULL,
    seed INTEGER NOT NULL,
    seconds REAL NOT NULL,
    elements INTEGER NOT NULL,
    ordering_fraction REAL,
    status TEXT NOT NULL CHECK (status IN ('done', 'failed')),
    reason TEXT NOT NULL,
    elapsed REAL NOT NULL,
    versions INTEGER NOT NULL REFERENCES versions,
    UNIQUE (sprinkling, realisation)
) STRICT""",
    """CREATE TABLE samples (
    sprinkling INTEGER NOT NULL,
    realisation INTEGER NOT NULL,
    cell INTEGER NOT NULL,
    trusted INTEGER NOT NULL CHECK (trusted IN (0, 1)),
    numbers BLOB NOT NULL,
    checksum INTEGER NOT NULL,
    UNIQUE (sprinkling, cell, realisation)
) STRICT""",
    "CREATE INDEX failures ON realisations (sprinkling, reason) WHERE status = 'failed'",
)


def _trigger(event: str, table: str, condition: str = "1") -> str:
    name = f"{table}_no_{event.split(maxsplit=1)[0].lower()}"
    return (
        f"CREATE TRIGGER {name} BEFORE {event} ON {table} WHEN {condition}\n"
        "BEGIN SELECT RAISE(ABORT, 'finished realisations are never changed'); END"
    )


_TRIGGERS = (
    *(
        _trigger(event, table)
        for table in ("versions", "realisations", "samples")
        for event in ("UPDATE", "DELETE")
    ),
    _trigger("UPDATE OF id, identity, versions, predicted", "meta"),
    _trigger("DELETE", "meta"),
    # A row that replaces another deletes it without a trigger for deletions, hence these.
    _trigger("INSERT", "meta", "EXISTS (SELECT 1 FROM meta)"),
    _trigger(
        "INSERT",
        "realisations",
        "EXISTS (SELECT 1 FROM realisations WHERE id = NEW.id OR"
        " (sprinkling = NEW.sprinkling AND realisation = NEW.realisation))",
    ),
    # The row of the realisation comes last: it closes the list of its samples.
    _trigger(
        "INSERT",
        "samples",
        "EXISTS (SELECT 1 FROM samples WHERE rowid = NEW.rowid) OR"
        " EXISTS (SELECT 1 FROM realisations"
        " WHERE sprinkling = NEW.sprinkling AND realisation = NEW.realisation)",
    ),
)
SCHEMA = (*_TABLES, *_TRIGGERS)
"""Statements that make an empty results file."""
