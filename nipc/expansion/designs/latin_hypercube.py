"""Latin hypercube (McKay, Beckman & Conover 1979): one point in each of n strata per variable."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray
from nipc.expansion.designs.cube import CubeDesign


@dataclass(frozen=True)
class LatinHypercube(CubeDesign):
    """Extension: of the strata of the larger number, those without a point get one each, so that
    doubling a design gives a Latin hypercube again."""

    def extend(self, taken: FloatArray, n_runs: int) -> FloatArray:
        total = len(taken) + n_runs
        rng = np.random.default_rng([self.seed, len(taken)])
        points = np.empty((n_runs, self.n_variables))
        for k in range(self.n_variables):
            held = np.unique((taken[:, k] * total).astype(np.int64))
            empty = np.setdiff1d(np.arange(total), held)
            strata = rng.permutation(empty)[:n_runs]
            points[:, k] = (strata + rng.random(n_runs)) / total
        return points
