"""Runs every missing run of a batch, keeps each as it is finished, never runs one twice."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from types import TracebackType
from typing import Self

import numpy as np

from nipc.errors import InputError, Interrupted, RunsError
from nipc.runs.crew import Crew, InlineCrew, Work
from nipc.runs.keys import run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.outcomes import Gathering, Outcomes
from nipc.runs.policy import FIRST, FailurePolicy, Tally
from nipc.runs.processes import ProcessCrew
from nipc.runs.progress import Progress, Silent
from nipc.runs.propagator import Batch, Propagator
from nipc.runs.record import Record, Status
from nipc.runs.unit import Answer, Unit
from nipc.runs.whereabouts import FailedBatch, failed_batch
from nipc.runs.writer import Writer

__all__ = ["BLOCK", "Engine", "FailurePolicy", "block_size"]

BLOCK = 64  # runs in one call of a vectorised propagator, whatever the number of workers
BLOCK_NUMBERS = 1 << 21  # and at most so many float64 in its answer


class Engine:
    """Runs batches of one propagator and keeps them in one ledger.

    Worker processes start with the first run and stay until `close`; use it in a `with` block.
    The numbers are the same whatever `n_jobs` and `backend`, and however often it was interrupted:
    a propagator that is not vectorised is asked for one run at a time, a vectorised one for blocks
    that depend on the batch alone, each kept whole or not at all.

    backend: "processes" (default: a run that crashes or hangs costs itself only), "inline" (this
    process), "dask" (a cluster, through joblib; see `nipc.runs.remote`). `n_jobs` < 0 counts from
    the number of processors, -1 being all. `time_limit` is in seconds a run.
    """

    def __init__(
        self,
        propagator: Propagator,
        ledger: Ledger,
        *,
        n_jobs: int = 1,
        time_limit: float | None = None,
        policy: FailurePolicy | None = None,
        progress: Progress | None = None,
        backend: str = "processes",
        scheduler: str | None = None,
    ) -> None:
        self.propagator = propagator
        self.ledger = ledger
        self.policy = FailurePolicy() if policy is None else policy
        self.notes: list[str] = []
        self.failed: list[FailedBatch] = []
        self.runs_done = 0
        self.runs_reused = 0
        self.progress: Progress = Silent() if progress is None else progress
        self._fingerprint = propagator.fingerprint()
        self._crew = _crew(propagator, ledger, n_jobs, time_limit, backend, scheduler)
        foreign = ledger.foreign(self._fingerprint)
        if foreign:
            self.notes.append(
                f"{foreign} kept runs are of a propagator with other code or settings, and are"
                " not used"
            )

    def run(self, batch: Batch, label: str) -> Outcomes:
        """Outcomes of all runs of the batch; only those that the ledger lacks are propagated.

        Raises Interrupted on Ctrl-C and RunsError when more fail than the policy tolerates; what
        was finished is kept in both cases. LedgerError when it cannot be.
        """
        keys = run_keys(batch, self._fingerprint)
        gathering = Gathering(batch, keys)
        fresh = self._complete(batch, keys, label, lambda done: gathering.add(done, False))
        kept = [key for key in dict.fromkeys(keys) if key not in fresh]
        gathering.add(self.ledger.read(kept), True)
        found = gathering.outcomes()
        if "missing" in found.kinds:  # found damaged while they were read
            self.ensure(batch, label)
            found = self.collect(batch)
        if not found.ok.all():
            self.failed.append(failed_batch(batch, found.ok))
        return found

    def ensure(self, batch: Batch, label: str) -> None:
        """Run and keep what is missing. Memory does not grow with the number of runs.

        Raises as `run`.
        """
        self._complete(batch, run_keys(batch, self._fingerprint), label, lambda done: None)

    # -- running ---------------------------------------------------------------------------------

    def _complete(
        self,
        batch: Batch,
        keys: list[bytes],
        label: str,
        tell: Callable[[list[Record]], None],
    ) -> frozenset[bytes]:
        """Run and keep what is missing, telling of what is kept; the keys of those."""
        if self.propagator.fingerprint() != self._fingerprint:
            raise RunsError(
                "the propagator's files changed while the study was running; start again: runs of"
                " the old files will not be used"
            )
        known = self.ledger.find(keys)
        unique = {key: row for row, key in reversed(list(enumerate(keys)))}
        rows = sorted(row for key, row in unique.items() if not self._settled(known.get(key)))
        reused = len(batch) - len(rows)
        self.runs_reused += reused
        if not rows:
            return frozenset()
        number = self.ledger.begin(batch, self._fingerprint, label, len(batch), reused)
        writer = Writer(self.ledger, number, keys, batch, self.progress, tell)
        tally = Tally(len(batch), sum(
            known[key][0] is Status.FAILED for key in unique if self._settled(known.get(key))
        ))  # fmt: skip
        units = self._first_units(batch, rows, keys, known)
        alone = False
        self.progress.start(label, len(batch), reused)
        try:
            while units:
                units = self._round(Work(batch, units, alone), writer, tally)
                alone = bool(units)
                units = units or tally.release()
            writer.commit()
        except KeyboardInterrupt:
            self._crew.stop()
            writer.commit()
            raise Interrupted(
                f"stopped at {label}; {writer.kept} runs finished in this batch are kept, and the"
                " next start goes on from here"
            ) from None
        except RunsError:
            self._crew.stop()
            writer.commit()
            raise
        finally:
            self.runs_done += writer.kept
            self.progress.finish()
        return frozenset(keys[row] for row in rows)

    def _settled(self, state: tuple[Status, int] | None) -> bool:
        if state is None or state[0] is Status.ALONE:
            return False
        return state[0] is Status.DONE or not self.policy.again

    def _first_units(
        self,
        batch: Batch,
        rows: list[int],
        keys: Sequence[bytes],
        known: dict[bytes, tuple[Status, int]],
    ) -> list[Unit]:
        """Single rows, or blocks that depend on the batch's order and on nothing else."""
        singles, fresh = [], []
        for row in rows:
            status, attempts = known.get(keys[row], (None, 0))
            if status is None:
                fresh.append(row)
            else:
                before = attempts if status is Status.ALONE else 0
                singles.append(Unit(np.array([row]), before + 1))
        if not self.propagator.vectorised:
            return [Unit(np.array([row])) for row in fresh] + singles
        size = block_size(batch)
        blocks: dict[int, list[int]] = {}
        for row in fresh:
            blocks.setdefault(row // size, []).append(row)
        return [Unit(np.array(block)) for block in blocks.values()] + singles

    def _round(self, work: Work, writer: Writer, tally: Tally) -> list[Unit]:
        """Carry units out; those that are to be tried again come back.

        When the first `FIRST` runs all fail, they are tried again before any other is begun: a
        propagator that cannot run at all is found at once and not after a night.
        """
        again: list[Unit] = []
        left = {unit.rows.tobytes(): unit for unit in work.units}
        for answer in self._crew.answers(work):
            if answer is not None:
                del left[answer.unit.rows.tobytes()]
                again += self._judge(answer, writer, tally)
                tally.good += sum(problem is None for problem in answer.problems)
            writer.commit_when_due(0.0 if answer is None else answer.seconds * len(answer.unit))
            tally.check(self.policy)
            doubtful = not work.alone and not tally.good and len(again) >= FIRST
            if doubtful and left and self.policy.tolerated < 1.0:
                self._crew.stop()
                tally.hold(list(left.values()))
                return again
        return again

    def _judge(self, answer: Answer, writer: Writer, tally: Tally) -> list[Unit]:
        """Keep what is final, all at once; the rest as units of one run."""
        unit = answer.unit
        verdicts: list[tuple[int, Status, int]] = []  # place, status, attempts
        again: list[Unit] = []
        for place, problem in enumerate(answer.problems):
            single = unit.rows[place : place + 1]
            if problem is None:
                verdicts.append((place, Status.DONE, unit.attempt))
            elif problem.kind == "suspect":
                return [unit]
            elif len(unit) > 1 and answer.states is None:
                # a block failed as a whole: each run's own first attempt is still to come
                verdicts.append((place, Status.ALONE, 0))
                again.append(Unit(single, 1))
            elif unit.attempt <= self.policy.retries:
                if len(unit) > 1:
                    verdicts.append((place, Status.ALONE, 1))
                again.append(Unit(single, unit.attempt + 1))
            else:
                verdicts.append((place, Status.FAILED, unit.attempt))
                tally.fail(problem)
        writer.add(answer, verdicts)
        return again

    # -- collecting ------------------------------------------------------------------------------

    def collect(self, batch: Batch) -> Outcomes:
        """What the ledger holds of a batch, without running anything."""
        keys = run_keys(batch, self._fingerprint)
        gathering = Gathering(batch, keys)
        gathering.add(self.ledger.read(list(dict.fromkeys(keys))), True)
        return gathering.outcomes()

    def pieces(self, batch: Batch, size: int = 1024) -> Iterator[tuple[slice, Outcomes]]:
        """The same, so many runs at a time, for batches that do not fit into memory."""
        for first in range(0, len(batch), size):
            rows = slice(first, min(first + size, len(batch)))
            yield rows, self.collect(batch.take(rows))

    # -- end -------------------------------------------------------------------------------------

    def close(self) -> None:
        """End the worker processes."""
        self._crew.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()


def block_size(batch: Batch) -> int:
    """Runs in one call of a vectorised propagator."""
    numbers = max(1, batch.times.size * batch.states.shape[1])
    return int(max(1, min(BLOCK, BLOCK_NUMBERS // numbers)))


def _crew(
    propagator: Propagator,
    ledger: Ledger,
    n_jobs: int,
    limit: float | None,
    backend: str,
    scheduler: str | None,
) -> Crew:
    if n_jobs == 0:
        raise ValueError("n_jobs counts workers and cannot be 0")
    count = n_jobs if n_jobs > 0 else max(1, (os.cpu_count() or 1) + 1 + n_jobs)
    if backend == "processes":
        return ProcessCrew(propagator, limit, count, ledger.folder)
    if backend == "inline":
        return InlineCrew(propagator, limit)
    if backend == "dask":
        if scheduler is None:
            raise InputError("the engine `dask` needs the address of its scheduler")
        from nipc.runs.remote import DaskCrew  # an extra, and slow to import

        return DaskCrew(propagator, limit, scheduler)
    raise ValueError(f"no backend is called {backend!r}; there are processes, inline and dask")
