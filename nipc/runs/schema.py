"""The ledger's tables, how its file is opened, and what SQLite's complaints mean."""

from __future__ import annotations

import sqlite3
from pathlib import Path

from nipc.errors import LedgerError
from nipc.runs.record import COLUMNS, from_row

VERSION = 1
APPLICATION = 0x6E697063  # "nipc"; SQLite keeps it in the file's header
PAGE = 8192  # bytes
_SMALL = 1 << 26  # bytes; larger files are examined where they are read

TABLES = """
CREATE TABLE arcs (
    id INTEGER PRIMARY KEY, digest BLOB NOT NULL UNIQUE, fingerprint TEXT NOT NULL,
    model BLOB NOT NULL, times BLOB NOT NULL, labels TEXT NOT NULL
);
CREATE TABLE batches (
    id INTEGER PRIMARY KEY, label TEXT NOT NULL, arc INTEGER NOT NULL REFERENCES arcs (id),
    total INTEGER NOT NULL, reused INTEGER NOT NULL, started REAL NOT NULL, pid INTEGER NOT NULL
);
CREATE TABLE runs (
    id INTEGER PRIMARY KEY, key BLOB NOT NULL UNIQUE, status INTEGER NOT NULL, kind TEXT NOT NULL,
    reason TEXT NOT NULL, seconds REAL NOT NULL, attempt INTEGER NOT NULL, block BLOB NOT NULL,
    block_size INTEGER NOT NULL, host TEXT NOT NULL, elapsed REAL NOT NULL, finished REAL NOT NULL,
    arc INTEGER NOT NULL REFERENCES arcs (id), batch INTEGER NOT NULL REFERENCES batches (id),
    ended REAL, n_times INTEGER NOT NULL, n_states INTEGER NOT NULL, start BLOB NOT NULL,
    coefficients BLOB NOT NULL, parameters BLOB NOT NULL, states BLOB NOT NULL,
    checksum BLOB NOT NULL
);
CREATE INDEX runs_by_batch ON runs (batch, status, elapsed);
CREATE TABLE facts (name TEXT PRIMARY KEY, value TEXT NOT NULL);
"""

UPSERT = (
    f"INSERT INTO runs ({', '.join(COLUMNS)}) VALUES ({', '.join('?' * len(COLUMNS))})"
    " ON CONFLICT (key) DO UPDATE SET "
    + ", ".join(f"{name} = excluded.{name}" for name in COLUMNS if name != "key")
)


def connect(path: Path) -> sqlite3.Connection:
    """A connection that may write; the tables are made in a new file."""
    connection = sqlite3.connect(path, timeout=10.0, isolation_level=None)
    try:
        if path.stat().st_size == 0:
            connection.execute(f"PRAGMA page_size = {PAGE}")
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute("PRAGMA synchronous = FULL")
        if connection.execute("PRAGMA user_version").fetchone()[0] == 0:
            create(connection)
    except BaseException:
        connection.close()
        raise
    return connection


def create(connection: sqlite3.Connection) -> None:
    """Make the tables, all or none."""
    if connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]:
        raise sqlite3.DatabaseError("malformed: tables without a version")
    connection.executescript(
        f"BEGIN IMMEDIATE; {TABLES} PRAGMA application_id = {APPLICATION};"
        f" PRAGMA user_version = {VERSION}; COMMIT;"
    )


def examine(connection: sqlite3.Connection, path: Path) -> None:
    """Raise where the file is damaged or not for this version."""
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    (application,) = connection.execute("PRAGMA application_id").fetchone()
    if application != APPLICATION:
        raise sqlite3.DatabaseError("malformed: not the header of a ledger")
    if version > 1000:
        raise sqlite3.DatabaseError("malformed: no such version")
    if version > VERSION:
        raise LedgerError(
            f"{path}: written by a later nipc (ledger version {version}, this one reads up to"
            f" {VERSION}); use that nipc, or another work folder"
        )
    if path.stat().st_size <= _SMALL:
        (verdict,) = connection.execute("PRAGMA integrity_check(1)").fetchone()
        if verdict != "ok":
            raise sqlite3.DatabaseError(f"malformed: {verdict}")
        for row in connection.execute(f"SELECT {', '.join(COLUMNS)} FROM runs"):
            if from_row(row) is None:
                raise sqlite3.DatabaseError("malformed: a run's checksum does not fit it")


def is_damage(error: sqlite3.DatabaseError) -> bool:
    """Whether the file's content is at fault, rather than the disk, the rights or another user."""
    code = getattr(error, "sqlite_errorcode", None)
    if code is not None:
        return (code & 0xFF) in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB)
    return str(error).startswith("malformed")


def explain(error: sqlite3.Error, folder: Path) -> LedgerError:
    """The same fault in words that say what to do."""
    code = (getattr(error, "sqlite_errorcode", None) or 0) & 0xFF
    if code == sqlite3.SQLITE_FULL:
        return LedgerError(
            f"{folder}: the disk is full; what was reported as finished is kept. Make room and"
            " start again: only missing runs are done"
        )
    if code in (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_PERM):
        return LedgerError(f"{folder}: the ledger cannot be written ({error}); is it read-only?")
    if code == sqlite3.SQLITE_IOERR:
        return LedgerError(
            f"{folder}: the ledger could not be written ({error}): the disk is full, a quota or"
            " file size limit is reached, or the disk fails. What was reported as finished is kept"
        )
    if code == sqlite3.SQLITE_BUSY:
        return LedgerError(f"{folder}: the ledger is held by another program ({error})")
    return LedgerError(f"{folder}: the ledger cannot be used ({error})")
