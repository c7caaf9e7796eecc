"""One kept run, and its checksum."""

from __future__ import annotations

import enum
import hashlib
import struct
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


def checksum(
    key: bytes, status: int, ended: float, shape: tuple[int, int], reason: str, *blobs: bytes
) -> bytes:
    """16 bytes that change when any bit that matters does."""
    digest = hashlib.blake2b(key, digest_size=16)
    digest.update(struct.pack("<qdqq", status, ended, *shape))
    for blob in (reason.encode("utf-8", "replace"), *blobs):
        digest.update(len(blob).to_bytes(8, "little"))
        digest.update(blob)
    return digest.digest()


def to_row(record: Record, arc: int, batch: int, finished: float) -> tuple[object, ...]:
    """The record in the order of `COLUMNS`."""
    blobs = (
        little(record.start),
        little(record.coefficients),
        little(record.parameters),
        b"" if record.states is None else little(record.states),
    )
    # SQLite has no NaN: it would read back as NULL, so "did not end" is NULL from the start
    ended = None if np.isnan(record.ended) else float(record.ended)
    reason = record.reason.encode("utf-8", "replace").decode()
    shape = record.shape()
    check = checksum(
        record.key, int(record.status), -np.inf if ended is None else ended, shape, reason, *blobs
    )
    return (
        record.key, int(record.status), record.kind, reason, float(record.seconds),
        int(record.attempt), record.block, int(record.block_size), record.host,
        float(record.elapsed), finished, arc, batch, ended, *shape, *blobs, check,
    )  # fmt: skip


COLUMNS = (
    "key", "status", "kind", "reason", "seconds", "attempt", "block", "block_size", "host",
    "elapsed", "finished", "arc", "batch", "ended", "n_times", "n_states",
    "start", "coefficients", "parameters", "states", "checksum",
)  # fmt: skip


def from_row(row: tuple[Any, ...]) -> Record | None:
    """The record of a row in the order of `COLUMNS`; None when its checksum does not fit it."""
    try:
        (
            key, status, kind, reason, seconds, attempt, block, block_size, host,
            elapsed, _, _, _, ended, n_times, n_states, *blobs, check,
        ) = row  # fmt: skip
        shape = (int(n_times), int(n_states))
        mark = -np.inf if ended is None else float(ended)
        if check != checksum(key, status, mark, shape, reason, *blobs):
            return None
        start, coefficients, parameters, states = (np.frombuffer(b, dtype="<f8") for b in blobs)
        return Record(
            key=key, status=Status(status), start=start, coefficients=coefficients,
            parameters=parameters,
            states=states.reshape(shape) if Status(status) is Status.DONE else None,
            ended=np.nan if ended is None else mark, kind=kind, reason=reason,
            seconds=float(seconds), attempt=int(attempt), block=block,
            block_size=int(block_size), host=host, elapsed=float(elapsed),
        )  # fmt: skip
    except (TypeError, ValueError, AttributeError, struct.error, UnicodeError):
        return None
