"""(state, times, forcing, parameters) -> states at those times: what nipc asks of a black box."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.problem.noise import Forcing


@dataclass(frozen=True, eq=False)
class Batch:
    """n runs over one arc.

    states (n, d) at times[0]; times (m,), increasing, of which the first is the arc's start;
    forcing holds n paths; parameters (n, P) in their physical units.
    """

    states: FloatArray
    times: FloatArray
    forcing: Forcing
    parameters: FloatArray

    def __len__(self) -> int:
        return int(self.states.shape[0])

    def take(self, rows: IntArray | slice) -> Batch:
        """Only these runs."""
        return Batch(self.states[rows], self.times, self.forcing.take(rows), self.parameters[rows])


@dataclass(frozen=True, eq=False)
class Trajectories:
    """States (n, m, d) at the batch's times.

    `ended` (n,) is the time at which a run stopped for a physical reason (re-entry, a lost
    particle), NaN where it did not; states after it are NaN, and that is not a failure.
    """

    states: FloatArray
    ended: FloatArray

    @classmethod
    def complete(cls, states: FloatArray) -> Trajectories:
        """Trajectories of which none ended early."""
        return cls(states, np.full(states.shape[0], np.nan))


@dataclass(frozen=True)
class AdapterContext:
    """Where a study stands and what it calls its things; what an adapter may use to build.

    `folder` holds the study file, `scratch` is where run folders may be made. `ito_sources` are
    the noise sources that the study reads in the Ito sense.
    """

    folder: Path
    scratch: Path
    state_names: tuple[str, ...]
    parameter_names: tuple[str, ...]
    source_names: tuple[str, ...]
    ito_sources: tuple[str, ...] = ()


class Propagator(ABC):
    """A deterministic propagator.

    One that is not `vectorised` is called with one run at a time. A run that cannot be done
    raises; the message becomes its reason in the ledger.
    """

    vectorised: bool = False

    @abstractmethod
    def propagate(self, batch: Batch) -> Trajectories:
        """States at batch.times for each run of the batch."""

    @abstractmethod
    def fingerprint(self) -> str:
        """Identity of the code and its settings: runs are reused only where this is the same."""
