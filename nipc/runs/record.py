"""One kept run, and its checksum."""

from __future__ import annotations

import enum
import hashlib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.runs.keys import little


class Status(enum.IntEnum):
    """What became of a run. ALONE: it failed in company and is to be tried again by itself."""

    DONE = 0
    FAILED = 1
    ALONE = 2


@dataclass(frozen=True, eq=False)
class Record:
    """A run as the ledger keeps it.

    `states` is (m, d), or None when the run failed; `block` names the runs it was propagated
    together with (empty when alone) and `block_size` counts them.
    """

    key: bytes
    status: Status
    start: FloatArray
    coefficients: FloatArray
    parameters: FloatArray
    states: FloatArray | None
    ended: float
    kind: str = ""
    reason: str = ""
    seconds: float = 0.0
    attempt: int = 1
    block: bytes = b""
    block_size: int = 1
    host: str = ""
    elapsed: float = 0.0

    def shape(self) -> tuple[int, int]:
        """(m, d), or (0, 0) for a run without states."""
        return (0, 0) if self.states is None else (self.states.shape[0], self.states.shape[1])


def checksum(values: Iterable[object]) -> bytes:
    """16 bytes that change when any bit of a row does."""
    digest = hashlib.blake2b(digest_size=16)
    for value in values:
        part = value if isinstance(value, bytes) else repr(value).encode("utf-8", "replace")
        digest.update(len(part).to_bytes(8, "little"))
        digest.update(part)
    return digest.digest()


def to_row(record: Record, arc: int, batch: int, finished: float) -> tuple[object, ...]:
    """The record in the order of `COLUMNS`."""
    # SQLite has no NaN: it would read back as NULL, so "did not end" is NULL from the start
    values = (
        record.key, int(record.status), record.kind, _storable(record.reason),
        float(record.seconds), int(record.attempt), record.block, int(record.block_size),
        record.host, float(record.elapsed), float(finished), arc, batch,
        None if np.isnan(record.ended) else float(record.ended), *record.shape(),
        little(record.start), little(record.coefficients), little(record.parameters),
        b"" if record.states is None else little(record.states),
    )  # fmt: skip
    return (*values, checksum(values))


def _storable(text: str) -> str:
    return text.encode("utf-8", "replace").decode()


COLUMNS = (
    "key", "status", "kind", "reason", "seconds", "attempt", "block", "block_size", "host",
    "elapsed", "finished", "arc", "batch", "ended", "n_times", "n_states",
    "start", "coefficients", "parameters", "states", "checksum",
)  # fmt: skip


def from_row(row: tuple[Any, ...]) -> Record | None:
    """The record of a row in the order of `COLUMNS`; None when its checksum does not fit it."""
    if row[-1] != checksum(row[:-1]):
        return None
    (
        key, status, kind, reason, seconds, attempt, block, block_size, host,
        elapsed, _, _, _, ended, n_times, n_states, *blobs, _,
    ) = row  # fmt: skip
    start, coefficients, parameters, states = (np.frombuffer(blob, dtype="<f8") for blob in blobs)
    done = Status(status) is Status.DONE
    return Record(
        key=key, status=Status(status), start=start, coefficients=coefficients,
        parameters=parameters, states=states.reshape(n_times, n_states) if done else None,
        ended=np.nan if ended is None else ended, kind=kind, reason=reason, seconds=seconds,
        attempt=attempt, block=block, block_size=block_size, host=host, elapsed=elapsed,
    )  # fmt: skip
