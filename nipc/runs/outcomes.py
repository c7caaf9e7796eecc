"""What came of a batch of runs."""

from __future__ import annotations

from dataclasses import dataclass

from nipc.arrays import BoolArray, FloatArray
from nipc.runs.failures import FailureReport


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
