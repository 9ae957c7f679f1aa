"""The SQLite file under a campaign's results: made, opened, locked, its errors in words.

One file at rest.  While it is written it is in SQLite's write-ahead mode and ``FILE-wal`` and
``FILE-shm`` lie beside it, as does ``FILE.lock``.  After a kill the newest realisations may be in
``FILE-wal`` alone: it belongs to the file and moves with it; the next opening takes it in.
"""

from __future__ import annotations

import contextlib
import os
import sqlite3
from collections.abc import Iterator
from pathlib import Path

from lozenge_engine.document import write_bytes
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.results_schema import APPLICATION_ID, PAGE_BYTES, SCHEMA, VERSION

__all__ = [
    "damaged",
    "in_words",
    "lay_down",
    "open_file",
    "primary_code",
    "settle",
    "snapshot",
    "transaction",
]

WAIT = 30.0
"""Seconds to wait for another connection's short lock."""
CACHE_KIBIBYTES = 131_072
"""Most memory for a connection's pages: samples of one sprinkling are spread over the file, so
with the default of 2 MB every page would be read for each of its samples."""
_SETTINGS = (
    "trusted_schema = OFF",
    "foreign_keys = ON",
    "synchronous = FULL",
    f"cache_size = -{CACHE_KIBIBYTES}",
)

_WORDS = {
    sqlite3.SQLITE_FULL: (
        "a disk that is full",
        "a disk with free space",
        "free some space and resume: all realisations recorded so far are kept",
    ),
    sqlite3.SQLITE_IOERR: (
        "a disk that fails to read or write",
        "a disk that works",
        "check the disk and resume: all realisations recorded so far are kept",
    ),
    sqlite3.SQLITE_READONLY: (
        "a file or a folder that takes no writing",
        "a results file in a folder that takes files",
        "change their rights, or copy the file into another folder",
    ),
    sqlite3.SQLITE_CANTOPEN: (
        "a file that cannot be opened",
        "a readable results file; beside a FILE-wal, in a folder that takes files",
        "check the rights of the file and of its folder",
    ),
    sqlite3.SQLITE_BUSY: (
        "a file that another program holds",
        "a file that no other program writes",
        "close the other program and try again",
    ),
    sqlite3.SQLITE_NOTADB: (
        "a file that is no results file",
        "a results file of a campaign",
        "check the path",
    ),
}


def damaged(path: Path, what: str) -> InputError:
    """Build the error for a file whose contents do not hold together.

    Parameters
    ----------
    path : Path
        The file.
    what : str
        What is wrong.

    Returns
    -------
    InputError
        For the caller to raise.
    """
    return refuse(
        str(path),
        given=f"a damaged file ({what})",
        allowed="a whole results file, with its FILE-wal if there is one",
        do="take it from a copy, or start a new file: the same seeds give the same samples",
    )


def primary_code(error: sqlite3.Error) -> int:
    """Tell what kind of error it is.

    Parameters
    ----------
    error : sqlite3.Error
        Of SQLite or of its Python module.

    Returns
    -------
    int
        SQLite's code without its extension, SQLITE_BUSY for SQLITE_LOCKED; 0 if it has none.
    """
    code = getattr(error, "sqlite_errorcode", 0) & 0xFF
    return sqlite3.SQLITE_BUSY if code == sqlite3.SQLITE_LOCKED else code


@contextlib.contextmanager
def in_words(path: Path) -> Iterator[None]:
    """Turn errors of SQLite into refusals.

    Parameters
    ----------
    path : Path
        The file that is worked on, for the refusal.

    Yields
    ------
    None
        Nothing.
    """
    try:
        yield
    except sqlite3.Error as error:
        code = primary_code(error)
        if code not in _WORDS:
            raise damaged(path, str(error)) from error
        given, allowed, do = _WORDS[code]
        raise refuse(str(path), given=given, allowed=allowed, do=do) from error
    except UnicodeDecodeError as error:
        # A damaged name in the file's own list of tables reaches Python undecoded.
        raise damaged(path, "text that is not UTF-8") from error


@contextlib.contextmanager
def transaction(connection: sqlite3.Connection) -> Iterator[None]:
    """Write all or nothing.

    Parameters
    ----------
    connection : sqlite3.Connection
        Writable, outside a transaction.

    Yields
    ------
    None
        Nothing; what was written is on the disk when the block has ended.
    """
    try:
        connection.execute("BEGIN IMMEDIATE")
        yield
        connection.execute("COMMIT")
    finally:
        if connection.in_transaction:
            connection.execute("ROLLBACK")


@contextlib.contextmanager
def snapshot(connection: sqlite3.Connection) -> Iterator[None]:
    """Read one state of the file in several queries, whatever is written meanwhile.

    Parameters
    ----------
    connection : sqlite3.Connection
        Outside a transaction.

    Yields
    ------
    None
        Nothing.
    """
    try:
        connection.execute("BEGIN")
        yield
    finally:
        if connection.in_transaction:
            connection.execute("ROLLBACK")


def lay_down(path: Path, *, preset: str, identity: str, versions: str, predicted: str) -> None:
    """Write an empty results file, whole or not at all.

    Parameters
    ----------
    path : Path
        The file, which must not exist.
    preset, identity, versions, predicted : str
        The row of the table meta; the versions go into their own table.

    Raises
    ------
    InputError
        If it exists, a part of an earlier file of its name lies there, or it cannot be written.
    """
    for taken in (path, *(path.with_name(path.name + end) for end in ("-wal", "-journal"))):
        if os.path.lexists(taken):
            raise refuse(
                str(taken),
                given="a new results file where one lies" if taken == path else "a part of a file",
                allowed="a name that is not taken",
                do="choose another name, or move this file away",
            )
    with in_words(path), contextlib.closing(_connect(":memory:")) as connection:
        connection.execute(f"PRAGMA page_size = {PAGE_BYTES}")
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {VERSION}")
        for statement in SCHEMA:
            connection.execute(statement)
        connection.execute("INSERT INTO versions VALUES (1, ?)", (versions,))
        connection.execute(
            "INSERT INTO meta VALUES (1, ?, ?, 1, ?, 0.0)", (preset, identity, predicted)
        )
        data = connection.serialize()
    write_bytes(path, data)


def _connect(name: str) -> sqlite3.Connection:
    """A connection without implied transactions, for any thread, one at a time."""
    connection = sqlite3.connect(
        name, uri=True, timeout=WAIT, isolation_level=None, check_same_thread=False
    )
    try:
        for setting in _SETTINGS:
            connection.execute(f"PRAGMA {setting}")
    except BaseException:
        connection.close()
        raise
    return connection


def open_file(path: Path, *, writable: bool) -> sqlite3.Connection:
    """Open a results file and check that it is one.

    Parameters
    ----------
    path : Path
        The file, absolute, behind symbolic links.
    writable : bool
        Whether realisations are going to be added; the file is then checked in full.

    Returns
    -------
    sqlite3.Connection
        Outside a transaction.

    Raises
    ------
    InputError
        If there is no such file, or it is none, newer, damaged or not writable.

    Notes
    -----
    It is never opened but by SQLite: closing any other handle on it would release the locks that
    this process holds on it.
    """
    _check_place(path)
    with in_words(path):
        try:
            return _opened(path, "mode=rw" if writable else "mode=ro")
        except sqlite3.OperationalError as error:
            # In a folder that takes no files, a file nobody writes needs none beside it.
            shut = primary_code(error) in (sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_READONLY)
            wal = path.with_name(path.name + "-wal")
            if writable or not shut or os.path.lexists(wal):
                raise
            return _opened(path, "mode=ro&immutable=1")


def _check_place(path: Path) -> None:
    try:
        size = path.stat().st_size
        given = "" if path.is_file() else "a folder" if path.is_dir() else "a device or a pipe"
        given = given or ("" if size else "an empty file")
    except FileNotFoundError:
        given = "no such file" if path.parent.is_dir() else "a folder that does not exist"
    except (OSError, ValueError) as error:
        given = getattr(error, "strerror", None) or str(error)
    if given:
        raise refuse(
            str(path), given=given, allowed="a results file of a campaign", do="check the path"
        )


def _opened(path: Path, mode: str) -> sqlite3.Connection:
    connection = _connect(f"{path.as_uri()}?{mode}")
    try:
        _check_format(path, connection)
        if mode == "mode=rw":
            _prepare(path, connection)
    except BaseException:
        connection.close()
        raise
    return connection


def _check_format(path: Path, connection: sqlite3.Connection) -> None:
    (application,) = connection.execute("PRAGMA application_id").fetchone()
    if application != APPLICATION_ID:
        raise refuse(
            str(path),
            given="a file that is no results file",
            allowed="a results file of a campaign",
            do="check the path",
        )
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    if version > VERSION:
        raise refuse(
            str(path),
            given=f"a results file of format {version}, of a newer version of this program",
            allowed=f"format {VERSION}",
            do="update this program",
        )
    found = {sql for (sql,) in connection.execute("SELECT sql FROM sqlite_schema")}
    if version < VERSION or not found.issuperset(SCHEMA):
        raise damaged(path, "its tables are not those of a results file")


def _prepare(path: Path, connection: sqlite3.Connection) -> None:
    """Check the whole file and go over to write-ahead mode."""
    (verdict,) = connection.execute("PRAGMA quick_check(1)").fetchone()
    if verdict != "ok":
        raise damaged(path, verdict)
    # SQLite opens what it may not write for reading, without a word; this asks in earnest.
    with transaction(connection):
        connection.execute("UPDATE meta SET elapsed = elapsed")
    (mode,) = connection.execute("PRAGMA journal_mode = WAL").fetchone()
    if mode != "wal":
        raise refuse(
            str(path),
            given="a folder whose files cannot be shared, such as one across a network",
            allowed="a folder on a disk of this machine",
            do="run there, and copy the file afterwards",
        )


def settle(connection: sqlite3.Connection) -> None:
    """Bring all that was written into the one file, as far as readers and the disk allow.

    Parameters
    ----------
    connection : sqlite3.Connection
        Writable, about to be closed.  What stays in ``FILE-wal`` is as safe there.
    """
    with contextlib.suppress(sqlite3.Error):
        connection.execute("PRAGMA busy_timeout = 0")
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        connection.execute("PRAGMA journal_mode = DELETE")
