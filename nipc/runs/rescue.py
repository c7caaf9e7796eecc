"""What is whole in a damaged ledger is taken over into a new one.

The new file is complete before it takes the old one's place, so that a rescue which is itself
interrupted loses nothing: it is begun again, or ended by the next start.
"""

from __future__ import annotations

import itertools
import os
import shutil
import sqlite3
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from nipc.runs import schema
from nipc.runs.record import COLUMNS, from_row

_STEP = 256  # rows read at once where nothing is wrong
_SMALLEST_ROW = 100  # bytes


def replace(path: Path) -> tuple[sqlite3.Connection, str]:
    """Set the damaged file aside, fill a new one; the connection, and a sentence for the user.

    Runs that were propagated together are taken over only together, so that those that must be
    run again are run as they were, and give the same numbers.
    """
    aside = _set_aside(path)
    draft = path.with_name(f"{path.name}.draft")
    for name in _with_companions(draft):
        name.unlink(missing_ok=True)
    new = schema.connect(draft)
    kept, lost = 0, 0
    try:
        old = _reader(aside)
        try:
            kept, lost = _copy(old, new, aside.stat().st_size)
        finally:
            old.close()
    except sqlite3.DatabaseError as error:
        if not schema.is_damage(error):
            raise
    finally:
        new.close()
    os.replace(draft, _finished(path))
    finish(path)
    note = (
        f"{path}: the ledger was damaged; {kept} whole runs were rescued"
        + (f", {lost} could be read but not trusted" if lost else "")
        + f". What is missing will be run again. The damaged file is kept as {aside.name}"
    )
    return schema.connect(path), note


def finish(path: Path) -> None:
    """Put a finished rescue in the damaged file's place, if there is one."""
    finished = _finished(path)
    if finished.exists():
        for name in _with_companions(path)[1:]:
            name.unlink(missing_ok=True)  # they belong to the damaged file
        os.replace(finished, path)


def _finished(path: Path) -> Path:
    return path.with_name(f"{path.name}.rescued")


def _with_companions(path: Path) -> list[Path]:
    """A database file, its log and its index of the log."""
    return [path, *(path.with_name(path.name + suffix) for suffix in ("-wal", "-shm"))]


def _set_aside(path: Path) -> Path:
    """A second name for the damaged file and its log."""
    aside = next(
        name
        for number in itertools.count(1)
        if not (name := path.with_name(f"{path.stem}.damaged-{number}{path.suffix}")).exists()
    )
    for source, target in zip(_with_companions(path)[:2], _with_companions(aside), strict=False):
        if source.exists():
            try:
                os.link(source, target)
            except OSError:  # not every file system has links
                shutil.copyfile(source, target)
    return aside


def _reader(path: Path) -> sqlite3.Connection:
    """A connection that reads as much of a damaged file as SQLite allows."""
    _mend_first_page(path)
    connection = sqlite3.connect(path, isolation_level=None)
    connection.execute("PRAGMA writable_schema = ON")  # or a short file would not be read at all
    connection.execute("PRAGMA query_only = ON")
    connection.execute("PRAGMA cell_size_check = ON")
    connection.text_factory = lambda raw: raw.decode("utf-8", "replace")
    return connection


def _mend_first_page(path: Path) -> None:
    """Put a ledger's own first page where the header or the list of tables is unreadable.

    The tables of every ledger are made in one order, so their roots are on the same pages.
    """
    probe = sqlite3.connect(path, isolation_level=None)
    try:
        probe.execute("PRAGMA writable_schema = ON")
        probe.execute("SELECT count(key) FROM runs WHERE id < 0").fetchone()
        return
    except sqlite3.DatabaseError:
        pass
    finally:
        probe.close()
    model = path.with_name(f"{path.name}.model")
    model.unlink(missing_ok=True)
    schema.connect(model).close()
    page = bytearray(model.read_bytes()[: schema.PAGE])
    model.unlink()
    page[28:32] = (path.stat().st_size // schema.PAGE).to_bytes(4, "big")
    page[32:40] = bytes(8)  # no free pages are known
    with path.open("r+b") as file:
        file.write(page)


def _copy(old: sqlite3.Connection, new: sqlite3.Connection, size: int) -> tuple[int, int]:
    """How many runs were taken over, and how many were not though something was read of them."""
    new.execute("BEGIN IMMEDIATE")
    for table in ("arcs", "batches", "facts"):
        _copy_table(old, new, table)
    blocks: Counter[tuple[bytes, int]] = Counter()
    seen: set[bytes] = set()
    kept = lost = 0
    for row in _rows(old, size // _SMALLEST_ROW + 1):
        record = from_row(row)
        if record is None:
            lost += 1
            continue
        if record.key in seen:  # pages may be listed twice
            continue
        seen.add(record.key)
        new.execute(schema.UPSERT, row)
        if record.block_size > 1:
            blocks[record.block, record.block_size] += 1
        kept += 1
    for (block, whole), count in blocks.items():
        if count < whole:
            new.execute("DELETE FROM runs WHERE block = ? AND block_size > 1", (block,))
            lost, kept = lost + count, kept - count
    new.execute(
        "INSERT INTO arcs SELECT DISTINCT arc, 'lost ' || arc, '', x'', x'', '' FROM runs"
        " WHERE arc NOT IN (SELECT id FROM arcs)"
    )
    new.execute("COMMIT")
    return kept, lost


def _rows(old: sqlite3.Connection, bound: int) -> Iterator[tuple[Any, ...]]:
    """Every row that can be read; ranges of ids that cannot are halved down to single rows."""
    ranges = [(0, bound)]
    query = f"SELECT id, {', '.join(COLUMNS)} FROM runs WHERE id BETWEEN ? AND ? ORDER BY id"
    while ranges:
        first, last = ranges.pop()
        try:
            found = old.execute(f"{query} LIMIT {_STEP}", (first, last)).fetchall()
        except sqlite3.DatabaseError:
            if first < last:
                middle = (first + last) // 2
                ranges += [(middle + 1, last), (first, middle)]
            continue
        yield from (row[1:] for row in found)
        if len(found) == _STEP and found[-1][0] < last:
            ranges.append((found[-1][0] + 1, last))


def _copy_table(old: sqlite3.Connection, new: sqlite3.Connection, table: str) -> None:
    """A small table, as far as it can be read."""
    try:
        cursor = old.execute(f"SELECT * FROM {table}")
        marks = ", ".join("?" * len(cursor.description))
        for row in cursor:
            new.execute(f"INSERT OR REPLACE INTO {table} VALUES ({marks})", row)
    except sqlite3.DatabaseError:
        return
