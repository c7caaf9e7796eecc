"""Many legs one after the other: a run cut where the propagator must stop and start again."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.runs.propagator import Batch, Trajectories


def by_legs(propagate: Callable[[Batch], Trajectories], batch: Batch) -> Trajectories:
    """Trajectories of a propagator that is only asked from one time of the batch to the next."""
    n, m, d = len(batch), batch.times.size, batch.states.shape[1]
    states, ended = np.full((n, m, d), np.nan), np.full(n, np.nan)
    states[:, 0] = batch.states
    alive = np.arange(n)
    for i in range(m - 1):
        found = propagate(leg(batch, alive, states[alive, i], batch.times[i : i + 2]))
        states[alive, i + 1] = found.states[:, -1]
        ended[alive] = found.ended
        alive = alive[np.isnan(found.ended)]
        if not alive.size:
            break
    return Trajectories(states, ended)


def leg(batch: Batch, rows: IntArray, states: FloatArray, times: FloatArray) -> Batch:
    """These runs of the batch from other states over other times, on the same paths."""
    return Batch(states, times, batch.forcing.take(rows), batch.parameters[rows])
