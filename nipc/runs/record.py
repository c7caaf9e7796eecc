"""One kept run, and its checksum."""

from __future__ import annotations

import enum
import hashlib
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

    @property
    def numbers(self) -> int:
        """How many float64 the states are."""
        return 0 if self.states is None else self.states.size

    def shape(self) -> tuple[int, int]:
        """(m, d), or (0, 0) for a run without states."""
        return (0, 0) if self.states is None else (self.states.shape[0], self.states.shape[1])


SCALARS = (
    "status", "kind", "reason", "seconds", "attempt", "block_size", "host", "elapsed", "finished",
    "arc", "batch", "ended", "n_times", "n_states",
)  # fmt: skip
BLOBS = ("key", "block", "start", "coefficients", "parameters", "states")
COLUMNS = (*SCALARS, *BLOBS, "checksum")
_SPLIT = len(SCALARS)


def checksum(values: tuple[Any, ...]) -> bytes:
    """16 bytes that change when any bit of a row does; values in the order of `COLUMNS`."""
    blobs = values[_SPLIT:]
    head = repr((values[:_SPLIT], [len(blob) for blob in blobs]))
    return hashlib.blake2b(b"".join((head.encode(), *blobs)), digest_size=16).digest()


def to_row(record: Record, arc: int, batch: int, finished: float) -> tuple[Any, ...]:
    """The record in the order of `COLUMNS`."""
    # SQLite has no NaN: it would read back as NULL, so "did not end" is NULL from the start
    ended = None if record.ended != record.ended else float(record.ended)
    values = (
        int(record.status), record.kind, record.reason.encode("utf-8", "replace").decode(),
        float(record.seconds), int(record.attempt), int(record.block_size), record.host,
        float(record.elapsed), float(finished), arc, batch, ended, *record.shape(),
        record.key, record.block, little(record.start), little(record.coefficients),
        little(record.parameters), b"" if record.states is None else little(record.states),
    )  # fmt: skip
    return (*values, checksum(values))


def from_row(row: tuple[Any, ...]) -> Record | None:
    """The record of a row in the order of `COLUMNS`; None when its checksum does not fit it."""
    try:
        if row[-1] != checksum(row[:-1]):
            return None
    except TypeError:  # a blob became something else
        return None
    (
        status, kind, reason, seconds, attempt, block_size, host, elapsed, _, _, _, ended,
        n_times, n_states, key, block, *blobs, _,
    ) = row  # fmt: skip
    start, coefficients, parameters, states = (np.frombuffer(blob, dtype="<f8") for blob in blobs)
    done = status == Status.DONE
    return Record(
        key=key, status=Status(status), start=start, coefficients=coefficients,
        parameters=parameters, states=states.reshape(n_times, n_states) if done else None,
        ended=np.nan if ended is None else ended, kind=kind, reason=reason, seconds=seconds,
        attempt=attempt, block=block, block_size=block_size, host=host, elapsed=elapsed,
    )  # fmt: skip
