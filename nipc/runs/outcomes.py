"""What came of a batch of runs."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.runs.failures import FailureReport, report
from nipc.runs.propagator import Batch
from nipc.runs.record import Record


@dataclass(frozen=True, eq=False)
class Outcomes:
    """One entry a run, in the batch's order.

    states (n, m, d): NaN rows for failed runs, and NaN after an ending; ok (n,); ended (n,): time
    of a physical ending, NaN where none; reasons: why a run failed, None where it did not;
    kinds: the same in a word; reused (n,): kept from before; seconds (n,): each run's own time.
    """

    states: FloatArray
    ok: BoolArray
    ended: FloatArray
    reasons: tuple[str | None, ...]
    kinds: tuple[str | None, ...]
    reused: BoolArray
    seconds: FloatArray
    failures: FailureReport

    def __len__(self) -> int:
        return int(self.ok.size)

    def account(self, rows: IntArray) -> Outcomes:
        """What became of some of the runs, without their states; the report stays the batch's."""
        return Outcomes(
            self.states[rows, :0], self.ok[rows], self.ended[rows],
            tuple(self.reasons[r] for r in rows), tuple(self.kinds[r] for r in rows),
            self.reused[rows], self.seconds[rows], self.failures,
        )  # fmt: skip


class Gathering:
    """Collects records of a batch's runs, in any order, into `Outcomes`."""

    def __init__(self, batch: Batch, keys: Sequence[bytes]) -> None:
        n, m, d = len(batch), batch.times.size, batch.states.shape[1]
        self._batch = batch
        self._rows: dict[bytes, list[int]] = {}
        for row, key in enumerate(keys):
            self._rows.setdefault(key, []).append(row)
        self._states = np.full((n, m, d), np.nan)
        self._ended, self._seconds = np.full(n, np.nan), np.zeros(n)
        self._ok, self._reused = np.zeros(n, bool), np.zeros(n, bool)
        self._kinds: list[str | None] = ["missing"] * n
        self._reasons: list[str | None] = ["not run"] * n

    def add(self, records: Iterable[Record], reused: bool) -> None:
        """Enter what became of some runs."""
        for record in records:
            rows = self._rows.get(record.key, [])
            for row in rows:
                self._seconds[row], self._reused[row] = record.seconds, reused
                if record.states is not None:
                    self._states[row], self._ended[row] = record.states, record.ended
                    self._ok[row] = True
                    self._kinds[row] = self._reasons[row] = None
                else:
                    self._kinds[row], self._reasons[row] = record.kind, record.reason

    def outcomes(self) -> Outcomes:
        """What was entered; runs of which nothing is known are failures of kind `missing`."""
        batch = self._batch
        germ = np.concatenate([batch.states, batch.forcing.coefficients, batch.parameters], axis=1)
        names = (
            *(f"start[{k}]" for k in range(1, batch.states.shape[1] + 1)),
            *batch.forcing.labels,
            *(f"parameter[{k}]" for k in range(1, batch.parameters.shape[1] + 1)),
        )
        kinds, reasons = tuple(self._kinds), tuple(self._reasons)
        return Outcomes(
            self._states, self._ok, self._ended, reasons, kinds, self._reused, self._seconds,
            report(self._ok, kinds, reasons, germ, names),
        )  # fmt: skip
