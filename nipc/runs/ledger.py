"""The file in which each finished run is kept: SQLite, numbers as raw float64, no pickle.

What is committed survives the death of the process and of the machine. One process writes at a
time; others may look on (`nipc.runs.status`). A damaged file is set aside and what is whole in it
is taken over (`nipc.runs.rescue`); `notes` then says so.
"""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Self, TypeVar

from nipc.errors import LedgerError
from nipc.runs import rescue, schema
from nipc.runs.keys import arc_digest, little
from nipc.runs.lock import WriterLock
from nipc.runs.propagator import Batch
from nipc.runs.record import COLUMNS, Record, Status, from_row, to_row

FILE_NAME = "ledger.sqlite"
LOCK_NAME = "ledger.lock"
_KEYS_AT_ONCE = 400
_BYTES_AT_ONCE = 1 << 22
_T = TypeVar("_T")


class Ledger:
    """The runs of one work folder; open it with `Ledger.open`."""

    def __init__(self, folder: Path, lock: WriterLock, connection: sqlite3.Connection) -> None:
        self.folder = folder
        self.path = folder / FILE_NAME
        self.notes: list[str] = []
        self._lock = lock
        self._connection = connection
        self._arcs: dict[bytes, int] = {}

    @classmethod
    def open(cls, folder: Path) -> Ledger:
        """The ledger of a work folder, which is made where it is missing.

        Raises LedgerError when the folder cannot be written, another process uses it, or the
        ledger is of a later version of nipc.
        """
        folder = Path(folder)
        try:
            folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise LedgerError(
                f"{folder}: the work folder cannot be made ({error.strerror})"
            ) from None
        lock = WriterLock(folder / LOCK_NAME)
        try:
            path = folder / FILE_NAME
            notes = []
            rescue.finish(path)
            if path.exists() and path.stat().st_size == 0:
                notes.append(f"{path}: the ledger is an empty file; nothing is kept in it")
            try:
                connection = schema.connect(path)
                schema.examine(connection, path)
            except sqlite3.DatabaseError as error:
                if not schema.is_damage(error):
                    raise
                connection, note = rescue.replace(path)
                notes.append(note)
            ledger = cls(folder, lock, connection)
            ledger.notes += notes
            return ledger
        except sqlite3.Error as error:
            lock.release()
            raise schema.explain(error, folder) from None
        except BaseException:
            lock.release()
            raise

    # -- reading ---------------------------------------------------------------------------------

    def find(self, keys: Sequence[bytes]) -> dict[bytes, tuple[Status, int]]:
        """Status and attempts of those of the keys that are known."""

        def query() -> dict[bytes, tuple[Status, int]]:
            found = {}
            for part in _parts(keys, _KEYS_AT_ONCE):
                marks = ",".join("?" * len(part))
                for key, status, attempt in self._connection.execute(
                    f"SELECT key, status, attempt FROM runs WHERE key IN ({marks})", part
                ):
                    found[key] = (Status(status), attempt)
            return found

        return self._recovering(query)

    def read(self, keys: Sequence[bytes]) -> Iterator[Record]:
        """The records of those of the keys that are known and whole, in no particular order.

        When a record's checksum does not fit it, the file is rescued, and `notes` says so.
        """
        damaged = False
        first, size = 0, 1
        while first < len(keys):
            part = keys[first : first + size]
            first += size
            for row in self._recovering(lambda part=part: self._rows(part)):  # type: ignore[misc]
                record = from_row(row)
                if record is None:
                    damaged = True
                else:
                    yield record
                    size = max(1, min(_KEYS_AT_ONCE, _BYTES_AT_ONCE // (8 * record.numbers + 1)))
        if damaged:
            self._rescue()

    def _rows(self, keys: Sequence[bytes]) -> list[tuple[Any, ...]]:
        marks = ",".join("?" * len(keys))
        query = f"SELECT {', '.join(COLUMNS)} FROM runs WHERE key IN ({marks})"
        return self._connection.execute(query, keys).fetchall()

    def count(self, status: Status | None = None) -> int:
        """How many runs are kept, of one status or of all."""
        where = "" if status is None else f" WHERE status = {int(status)}"
        return int(self._recovering(
            lambda: self._connection.execute(f"SELECT count(*) FROM runs{where}").fetchone()[0]
        ))  # fmt: skip

    def foreign(self, fingerprint: str) -> int:
        """How many runs are kept of a propagator with another fingerprint."""
        query = (
            "SELECT count(*) FROM runs JOIN batches ON batches.id = runs.batch"
            " JOIN arcs ON arcs.id = batches.arc"
            " WHERE arcs.fingerprint NOT IN (?, '')"
        )
        return int(self._recovering(
            lambda: self._connection.execute(query, (fingerprint,)).fetchone()[0]
        ))  # fmt: skip

    # -- writing ---------------------------------------------------------------------------------

    def begin(self, batch: Batch, fingerprint: str, label: str, total: int, reused: int) -> int:
        """Enter that a batch of runs begins; the number by which `write` refers to it."""

        def work() -> int:
            arc = self._arc(batch, fingerprint)
            cursor = self._connection.execute(
                "INSERT INTO batches (label, arc, total, reused, started, pid)"
                " VALUES (?, ?, ?, ?, ?, ?)",
                (label, arc, total, reused, time.time(), os.getpid()),
            )
            assert cursor.lastrowid is not None
            return cursor.lastrowid

        return self._writing(work)

    def _arc(self, batch: Batch, fingerprint: str) -> int:
        digest = arc_digest(batch, fingerprint)
        if digest not in self._arcs:
            self._connection.execute(
                "INSERT OR IGNORE INTO arcs (digest, fingerprint, model, times, labels)"
                " VALUES (?, ?, ?, ?, ?)",
                (digest, fingerprint, batch.forcing.digest(), little(batch.times),
                 "\n".join(batch.forcing.labels)),
            )  # fmt: skip
            query = "SELECT id FROM arcs WHERE digest = ?"
            return int(self._connection.execute(query, (digest,)).fetchone()[0])
        return self._arcs[digest]

    def write(self, records: Iterable[Record], number: int) -> None:
        """Keep these runs, all or none; on return they are on the disk."""
        records = list(records)

        def work() -> None:
            query = "SELECT arc FROM batches WHERE id = ?"
            arc = self._connection.execute(query, (number,)).fetchone()[0]
            now = time.time()
            self._connection.executemany(
                schema.UPSERT, [to_row(record, arc, number, now) for record in records]
            )

        self._writing(work)

    def expect(self, total: int) -> None:
        """Say how many runs the whole study will need, for `nipc status`."""
        self._writing(
            lambda: self._connection.execute(
                "INSERT OR REPLACE INTO facts (name, value) VALUES ('expected', ?)", (str(total),)
            )
        )

    # -- faults ----------------------------------------------------------------------------------

    def _writing(self, work: Callable[[], _T]) -> _T:
        """Do work in one transaction."""

        def transaction() -> _T:
            self._connection.execute("BEGIN IMMEDIATE")
            try:
                result = work()
                self._connection.execute("COMMIT")
                return result
            except BaseException:
                if self._connection.in_transaction:
                    self._connection.execute("ROLLBACK")
                raise

        return self._recovering(transaction)

    def _recovering(self, work: Callable[[], _T]) -> _T:
        """Do work; once more on what could be rescued when it meets damage."""
        try:
            try:
                return work()
            except sqlite3.DatabaseError as error:
                if not schema.is_damage(error):
                    raise
            self._rescue()
            return work()
        except sqlite3.Error as error:
            raise schema.explain(error, self.folder) from None

    def _rescue(self) -> None:
        """Go on with a new file that holds what is whole in the old one."""
        self._connection.close()
        self._arcs.clear()
        self._connection, note = rescue.replace(self.path)
        self.notes.append(note)

    # -- end -------------------------------------------------------------------------------------

    def close(self) -> None:
        """Close the file and let other processes in."""
        try:
            self._connection.close()
        except sqlite3.Error as error:
            raise LedgerError(f"{self.path}: cannot be closed ({error})") from None
        finally:
            self._lock.release()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def _parts(keys: Sequence[bytes], size: int) -> Iterator[Sequence[bytes]]:
    for first in range(0, len(keys), size):
        yield keys[first : first + size]
