"""What came of a batch of runs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.runs.failures import FailureReport, report
from nipc.runs.keys import run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import Batch


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


def gather(
    ledger: Ledger, batch: Batch, fingerprint: str, fresh: frozenset[bytes] = frozenset()
) -> Outcomes:
    """What the ledger holds of a batch; runs that it lacks are failures of kind `missing`.

    `fresh` are the keys of runs that count as new rather than reused.
    """
    n, m, d = len(batch), batch.times.size, batch.states.shape[1]
    rows: dict[bytes, list[int]] = {}
    for row, key in enumerate(run_keys(batch, fingerprint)):
        rows.setdefault(key, []).append(row)
    states, ended, seconds = np.full((n, m, d), np.nan), np.full(n, np.nan), np.zeros(n)
    ok, reused = np.zeros(n, bool), np.zeros(n, bool)
    kinds: list[str | None] = ["missing"] * n
    reasons: list[str | None] = ["not run"] * n
    for record in ledger.read(list(rows)):
        for row in rows[record.key]:
            seconds[row] = record.seconds
            reused[row] = record.key not in fresh
            if record.states is not None:
                states[row], ended[row], ok[row] = record.states, record.ended, True
                kinds[row] = reasons[row] = None
            else:
                kinds[row], reasons[row] = record.kind, record.reason
    germ = np.concatenate([batch.states, batch.forcing.coefficients, batch.parameters], axis=1)
    names = (
        *(f"start[{k}]" for k in range(1, d + 1)),
        *batch.forcing.labels,
        *(f"parameter[{k}]" for k in range(1, batch.parameters.shape[1] + 1)),
    )
    found = report(ok, kinds, reasons, germ, names)
    return Outcomes(states, ok, ended, tuple(reasons), tuple(kinds), reused, seconds, found)
