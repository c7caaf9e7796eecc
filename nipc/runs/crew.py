"""Who carries units out: a small family, one file each."""

from __future__ import annotations

import socket
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import threadpoolctl

from nipc.runs.propagator import Batch, Propagator
from nipc.runs.unit import Answer, Unit, call


@dataclass(frozen=True, eq=False)
class Work:
    """Units of one batch. `alone`: nothing else is to share the process that runs a unit."""

    batch: Batch
    units: Sequence[Unit]
    alone: bool = False


class Crew(ABC):
    """Carries units out, each exactly as it is; answers come as they are ready, in any order.

    A unit may be answered by a problem of kind `suspect`: its process died while it was at work
    on several units, and it is not known which of them was the cause.
    """

    def __init__(self, propagator: Propagator, limit: float | None) -> None:
        self.propagator = propagator
        self.limit = limit

    @abstractmethod
    def answers(self, work: Work) -> Iterator[Answer | None]:
        """One answer a unit; None now and then while nothing is ready."""

    def stop(self) -> None:  # noqa: B027 - not every crew has something at work
        """End what is at work; its answers are not wanted."""

    def close(self) -> None:  # noqa: B027 - not every crew has something to let go
        """Let go of processes."""


class InlineCrew(Crew):
    """Runs in this very process: for debugging, and for runs that take microseconds.

    A run that kills its process kills the study's; what was kept stays kept.
    """

    def answers(self, work: Work) -> Iterator[Answer | None]:
        host = socket.gethostname()
        with threadpoolctl.threadpool_limits(1):
            for unit in work.units:
                part = work.batch.take(unit.rows)
                yield call(self.propagator, part, unit, self.limit, host)
