"""Scrambled Sobol' sequence (Sobol' 1967; Owen 1998): an extension simply continues it."""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
from scipy.stats import qmc

from nipc.arrays import FloatArray
from nipc.expansion.designs.cube import CubeDesign


@dataclass(frozen=True)
class SobolDesign(CubeDesign):
    """Balanced best when the number of points is a power of two."""

    def extend(self, taken: FloatArray, n_runs: int) -> FloatArray:
        sequence = qmc.Sobol(self.n_variables, scramble=True, rng=self.seed)
        if len(taken):
            sequence.fast_forward(len(taken))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)  # counts other than powers of two
            return np.asarray(sequence.random(n_runs))
