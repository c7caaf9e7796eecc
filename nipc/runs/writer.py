"""Finished runs on their way into the ledger."""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Sequence

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.errors import LedgerError
from nipc.runs.keys import block_digest
from nipc.runs.ledger import Ledger
from nipc.runs.progress import Progress
from nipc.runs.propagator import Batch
from nipc.runs.record import Record, Status
from nipc.runs.unit import Answer

COMMIT_SECONDS = 0.5
COMMIT_BYTES = 1 << 25


class Writer:
    """Keeps the runs of one batch, at the latest `COMMIT_SECONDS` after they are finished.

    Runs that came from one call are kept together or not at all. Progress, and `tell`, hear of a
    run once it is on the disk.
    """

    def __init__(
        self,
        ledger: Ledger,
        number: int,
        keys: Sequence[bytes],
        batch: Batch,
        progress: Progress,
        tell: Callable[[list[Record]], None],
    ) -> None:
        self.kept = 0
        self._ledger, self._number, self._keys, self._batch = ledger, number, keys, batch
        self._progress, self._tell = progress, tell
        self._calls: list[list[Record]] = []
        self._bytes = 0
        self._began = self._last = time.monotonic()

    def add(self, answer: Answer, verdicts: Sequence[tuple[int, Status, int]]) -> None:
        """Take an answer in; a verdict is a place in its unit, a status, and attempts so far."""
        block = self._block(answer.unit.rows)
        records = [self._record(answer, block, *verdict) for verdict in verdicts]
        self._calls.append(records)  # one step, so that Ctrl-C cannot part them
        self._bytes += sum(r.states.nbytes for r in records if r.states is not None)

    def _record(
        self, answer: Answer, block: bytes, place: int, status: Status, attempt: int
    ) -> Record:
        row = int(answer.unit.rows[place])
        problem = answer.problems[place]
        states: FloatArray | None = None
        ended = np.nan
        if status is Status.DONE:
            assert answer.states is not None
            assert answer.ended is not None
            states, ended = answer.states[place], float(answer.ended[place])
        return Record(
            key=self._keys[row], status=status, start=self._batch.states[row],
            coefficients=self._batch.forcing.coefficients[row],
            parameters=self._batch.parameters[row], states=states, ended=ended,
            kind=problem.kind if problem else "", reason=problem.reason if problem else "",
            seconds=answer.seconds, attempt=attempt, block=block, block_size=len(answer.unit),
            host=answer.host, elapsed=time.monotonic() - self._began,
        )  # fmt: skip

    def _block(self, rows: IntArray) -> bytes:
        if rows.size == 1:
            return b""
        return block_digest([self._keys[int(row)] for row in rows])

    def commit_when_due(self, expected: float = 0.0) -> None:
        """Keep what was collected if it has waited long enough or grown large.

        `expected` is in how many seconds the next call may come at the latest, as far as known.
        """
        waited = time.monotonic() - self._last
        if waited + expected > COMMIT_SECONDS or self._bytes > COMMIT_BYTES:
            self.commit()

    def commit(self) -> None:
        """Keep what was collected; call by call, as many as there is room for, when it fails."""
        self._last = time.monotonic()
        if not self._calls:
            return
        try:
            self._keep(len(self._calls))
        except LedgerError:
            while len(self._calls) > 1:
                self._keep(1)
            raise

    def _keep(self, count: int) -> None:
        """Keep the first `count` calls, all or none."""
        records = list(itertools.chain.from_iterable(self._calls[:count]))
        self._ledger.write(records, self._number)
        del self._calls[:count]
        self._bytes = sum(r.states.nbytes for c in self._calls for r in c if r.states is not None)
        final = [record for record in records if record.status is not Status.ALONE]
        failed = sum(1 for record in final if record.status is Status.FAILED)
        self.kept += len(final)
        self._tell(final)
        self._progress.advance(len(final), failed)
