"""Many machines, through joblib's Dask backend: same ledger, same numbers.

    dask scheduler                                    # on one machine, prints tcp://ADDRESS:8786
    dask worker tcp://ADDRESS:8786 --nthreads 1 --nworkers 8    # on each of the others
    nipc run study.toml --engine dask --scheduler tcp://ADDRESS:8786

In a batch queue, dask-jobqueue's clusters start scheduler and workers; their address is
`cluster.scheduler_address`. nipc must be installed on the workers, in the same version, and the
study's folder must be there under the same path. Each thread of a Dask worker runs the propagator
in a process of its own, watched as on one machine, so a crash or a hang costs that run and not the
Dask worker. Who can reach a scheduler can run code on its workers: keep it in a trusted network.
"""

from __future__ import annotations

import queue
import threading
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

import joblib
import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError, RunsError
from nipc.problem.noise import NoiseModel
from nipc.runs.crew import Crew, Work
from nipc.runs.processes import ProcessCrew
from nipc.runs.propagator import Batch, Propagator
from nipc.runs.unit import Answer, Problem, Unit

CONNECT_SECONDS = 30.0
_POLL = 0.2
_GIVE_UP = 3  # times that a unit may go under together with the machine it was on
_own = threading.local()


class DaskCrew(Crew):
    """Runs on the workers of a Dask cluster, all of them."""

    def __init__(self, propagator: Propagator, limit: float | None, scheduler: str) -> None:
        super().__init__(propagator, limit)
        try:
            import distributed
        except ImportError:
            raise InputError(
                "the engine `dask` needs the packages of `pip install 'nipc[cluster]'`"
            ) from None
        try:
            self._client = distributed.Client(
                scheduler, timeout=CONNECT_SECONDS, set_as_default=False
            )
        except (OSError, TimeoutError, ValueError) as error:
            raise InputError(
                f"no Dask scheduler answers at {scheduler!r} ({error}); right is the address that"
                " `dask scheduler` prints, such as tcp://10.0.0.1:8786"
            ) from None
        self._mark = propagator.fingerprint()

    def answers(self, work: Work) -> Iterator[Answer | None]:
        left = {unit.rows.tobytes(): unit for unit in work.units}
        for _ in range(_GIVE_UP):
            cause: BaseException | None = None
            for answer in self._once(list(left.values()), work.batch):
                if isinstance(answer, BaseException):
                    cause = answer
                    break
                if answer is not None:
                    del left[answer.unit.rows.tobytes()]
                yield answer
            if not left:
                return
        if cause is not None and len(left) == len(work.units):
            raise RunsError(f"the Dask cluster does no runs: {type(cause).__name__}: {cause}")
        problem = Problem("crash", f"its machines were lost {_GIVE_UP} times ({cause})")
        for unit in left.values():
            yield Answer.failure(unit, problem, 0.0)

    def _once(self, units: Sequence[Unit], batch: Batch) -> Iterator[Answer | BaseException | None]:
        """Answers as they come; an exception at the end when the cluster gave up."""
        results: queue.SimpleQueue[Answer | BaseException | None] = queue.SimpleQueue()
        stop = threading.Event()

        def feed() -> None:
            try:
                with joblib.parallel_config(backend="dask", client=self._client):
                    pool = joblib.Parallel(return_as="generator_unordered")
                    for answer in pool(self._task(unit, batch) for unit in units):
                        results.put(answer)
                        if stop.is_set():
                            break
                results.put(None)
            except BaseException as error:
                results.put(error)

        threading.Thread(target=feed, daemon=True).start()
        try:
            while True:
                try:
                    result = results.get(timeout=_POLL)
                except queue.Empty:
                    yield None
                    continue
                if result is None:
                    return
                yield result
                if isinstance(result, BaseException):
                    return
        finally:
            stop.set()

    def _task(self, unit: Unit, batch: Batch) -> Any:
        part = batch.take(unit.rows)
        return joblib.delayed(run_there)(
            self.propagator, self.limit, self._mark, unit, part.times, part.forcing.model,
            part.states, part.forcing.coefficients, part.parameters,
        )  # fmt: skip

    def close(self) -> None:
        self._client.close()


def run_there(
    propagator: Propagator,
    limit: float | None,
    mark: str,
    unit: Unit,
    times: FloatArray,
    model: NoiseModel,
    states: FloatArray,
    coefficients: FloatArray,
    parameters: FloatArray,
) -> Answer:
    """One unit, in this thread's own process; on a Dask worker."""
    if getattr(_own, "mark", None) != (mark, limit):
        if hasattr(_own, "crew"):
            _own.crew.close()
        _own.crew = ProcessCrew(propagator, limit, 1)
        _own.mark = (mark, limit)
    crew: ProcessCrew = _own.crew
    batch = Batch(states, times, model.realise(coefficients), parameters)
    here = Unit(np.arange(len(unit)), unit.attempt)
    answer = next(a for a in crew.answers(Work(batch, [here], alone=True)) if a is not None)
    return replace(answer, unit=unit)
