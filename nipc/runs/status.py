"""What a work folder holds, seen from another terminal while runs go on there."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from nipc.errors import InputError
from nipc.runs import schema
from nipc.runs.journey import duration
from nipc.runs.ledger import FILE_NAME, LOCK_NAME
from nipc.runs.lock import holder_of, is_held
from nipc.runs.record import Status


@dataclass(frozen=True)
class BatchStatus:
    """The batch that was begun last. `rate` is in runs per second while it was at work."""

    label: str
    total: int
    done: int
    failed: int
    rate: float

    @property
    def missing(self) -> int:
        return self.total - self.done - self.failed

    @property
    def time_left(self) -> float | None:
        """Seconds, or None where nothing can be said."""
        return self.missing / self.rate if self.rate > 0.0 else None


@dataclass(frozen=True)
class FolderStatus:
    """Runs kept in a work folder.

    `holder` is who writes to it now, None when nobody; `expected` how many runs the study said it
    would need, None where it did not.
    """

    done: int
    failed: int
    expected: int | None
    reasons: tuple[tuple[str, int], ...]
    batch: BatchStatus | None
    holder: str | None
    size: int

    def __str__(self) -> str:
        lines = [f"runs       {self.done} done, {self.failed} failed"]
        if self.expected is not None:
            missing = max(0, self.expected - self.done - self.failed)
            lines[0] += f", {missing} missing of {self.expected}"
        lines += [f"           {count} x {reason}" for reason, count in self.reasons]
        if self.batch is not None:
            b = self.batch
            text = f"{b.label}: {b.done} done, {b.failed} failed, {b.missing} missing"
            if b.missing and b.rate > 0.0:
                text += f", {b.rate:.3g} runs/s"
                if self.holder is not None and b.time_left is not None:
                    text += f", {duration(b.time_left)} left"
            lines.append(f"last batch {text}")
        lines.append(
            f"now        {'in use by ' + self.holder if self.holder else 'nobody at work'}"
        )
        lines.append(f"on disk    {_size(self.size)}")
        return "\n".join(lines)


def status(folder: Path) -> FolderStatus:
    """The state of a work folder; nothing in it is changed. InputError where there is no ledger."""
    path = Path(folder) / FILE_NAME
    if not path.is_file():
        raise InputError(f"{folder}: nothing has been run here yet (there is no {FILE_NAME})")
    lock = Path(folder) / LOCK_NAME
    try:
        with _reader(path) as connection:
            connection.execute("BEGIN")  # one moment for all queries
            counts = dict(connection.execute("SELECT status, count(*) FROM runs GROUP BY status"))
            expected = connection.execute(
                "SELECT value FROM facts WHERE name = 'expected'"
            ).fetchone()
            reasons = connection.execute(
                "SELECT kind, count(*) AS n FROM runs WHERE status = ? GROUP BY kind"
                " ORDER BY n DESC LIMIT 8",
                (int(Status.FAILED),),
            ).fetchall()
            batch = _last_batch(connection)
    except sqlite3.Error as error:
        raise schema.explain(error, Path(folder)) from None
    return FolderStatus(
        done=counts.get(int(Status.DONE), 0),
        failed=counts.get(int(Status.FAILED), 0),
        expected=None if expected is None else int(expected[0]),
        reasons=tuple((str(kind), int(count)) for kind, count in reasons),
        batch=batch,
        holder=holder_of(lock) if is_held(lock) else None,
        size=sum(file.stat().st_size for file in path.parent.glob(f"{path.stem}*")),
    )


@contextmanager
def _reader(path: Path) -> Iterator[sqlite3.Connection]:
    uri = path.resolve().as_uri()
    connection = sqlite3.connect(f"{uri}?mode=ro", uri=True, timeout=10.0, isolation_level=None)
    try:
        yield connection
    finally:
        connection.close()


def _last_batch(connection: sqlite3.Connection) -> BatchStatus | None:
    row = connection.execute(
        "SELECT id, label, total, reused FROM batches ORDER BY id DESC LIMIT 1"
    ).fetchone()
    if row is None:
        return None
    number, label, total, reused = row
    counts: dict[int, int] = {}
    elapsed = 0.0
    for state, count, latest in connection.execute(
        "SELECT status, count(*), max(elapsed) FROM runs WHERE batch = ? GROUP BY status", (number,)
    ):
        counts[state] = count
        elapsed = max(elapsed, latest)
    done, failed = counts.get(int(Status.DONE), 0), counts.get(int(Status.FAILED), 0)
    rate = (done + failed) / elapsed if elapsed > 0.0 else 0.0
    return BatchStatus(str(label), int(total), int(reused) + done, failed, rate)


def _size(count: float) -> str:
    for unit in ("bytes", "kB", "MB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000.0
    return f"{count:.3g} GB"
