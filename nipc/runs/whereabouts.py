"""Where the runs of a batch were that failed, and where the good ones."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.runs.propagator import Batch


@dataclass(frozen=True, eq=False)
class FailedBatch:
    """A batch of which some runs failed.

    values (n, K) are its runs' states at `start`, noise coefficients and parameters, from their
    mean in their standard deviations; directions that do not vary are left out of `names` (K,).
    """

    start: float
    names: tuple[str, ...]
    values: FloatArray
    ok: BoolArray


def failed_batch(batch: Batch, ok: BoolArray) -> FailedBatch:
    """What is kept of a batch whose runs (n,) were `ok` or not."""
    states, parameters = batch.states, batch.parameters
    columns = np.concatenate([states, batch.forcing.coefficients, parameters], axis=1)
    names = np.array(
        [
            *(f"start[{k}]" for k in range(1, states.shape[1] + 1)),
            *batch.forcing.labels,
            *(f"parameter[{k}]" for k in range(1, parameters.shape[1] + 1)),
        ]
    )
    middle, spread = columns.mean(axis=0), columns.std(axis=0)
    used = spread > 1e-12 * np.abs(middle)
    values = (columns[:, used] - middle[used]) / spread[used]
    return FailedBatch(float(batch.times[0]), tuple(names[used].tolist()), values, ok)
