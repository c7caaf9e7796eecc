"""Error of a whole way of fitting, selection and all: each fold predicted from the others."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.expansion.fits.fit import Fitter


def cross_validated(
    fitter: Fitter,
    matrix: FloatArray,
    outputs: FloatArray,
    rng: np.random.Generator,
    folds: int = 5,
) -> FloatArray:
    """Root-mean-square error (outputs,), in the outputs' unit, of predicting each of `folds` random
    parts of the runs from the rest. Slightly pessimistic: every fit has fewer runs."""
    outputs = outputs.reshape(outputs.shape[0], -1)
    n_runs = outputs.shape[0]
    squares = np.zeros(outputs.shape[1])
    for part in np.array_split(rng.permutation(n_runs), min(folds, n_runs)):
        rest = np.setdiff1d(np.arange(n_runs), part)
        fit = fitter(matrix[:, rest], outputs[rest])
        squares += np.sum((matrix[:, part].T @ fit.coefficients - outputs[part]) ** 2, axis=0)
    return np.asarray(np.sqrt(squares / n_runs))
