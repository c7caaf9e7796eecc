"""What every way of fitting returns, and the checks that all of them make first."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.errors import FitError
from nipc.expansion.basis import Basis
from nipc.expansion.expansion import Expansion


@dataclass(frozen=True)
class Fit:
    """coefficients (terms, outputs);
    loo (outputs,): root-mean-square leave-one-out residual, in the output's unit;
    spread (outputs,): standard deviation of the output over the runs, same unit;
    correction (outputs,): factor on loo² for as few runs as these (1 with many);
    leverage (runs,): how far each run determines its own fitted value, 0 … 1, the mean over outputs
    where they differ; n_terms (outputs,): terms in use.
    """

    coefficients: FloatArray
    loo: FloatArray
    spread: FloatArray
    correction: FloatArray
    leverage: FloatArray
    n_terms: FloatArray

    @property
    def relative_error(self) -> FloatArray:
        """Leave-one-out error over the spread (outputs,); zero for constant outputs."""
        return _relative(self.loo, self.spread)

    @property
    def corrected_error(self) -> FloatArray:
        """The same, corrected for few runs: what models of different size are compared by.

        Pessimistic as an estimate when the nodes were chosen for the basis.
        """
        return _relative(self.loo * np.sqrt(self.correction), self.spread)

    def expansion(self, basis: Basis, output_shape: tuple[int, ...] | None = None) -> Expansion:
        """The expansion with these coefficients, outputs folded back to their shape."""
        shape = self.loo.shape if output_shape is None else output_shape
        return Expansion(basis, self.coefficients.reshape(-1, *shape), self.loo.reshape(shape))


Fitter = Callable[[FloatArray, FloatArray], Fit]  # (basis matrix, outputs (runs, outputs))


def _relative(error: FloatArray, spread: FloatArray) -> FloatArray:
    alive = spread > 0.0
    return np.where(alive, error / np.where(alive, spread, 1.0), 0.0)


def finite_rows(outputs: FloatArray) -> BoolArray:
    """Runs (n,) all of whose outputs (n, …) are finite: the ones that can be fitted."""
    return np.asarray(np.isfinite(outputs).reshape(outputs.shape[0], -1).all(axis=1))


def checked(
    matrix: FloatArray, outputs: FloatArray, weights: FloatArray | None
) -> tuple[FloatArray, FloatArray]:
    """Outputs (runs, outputs) and weights (runs,) of mean 1; FitError on what cannot be fitted."""
    outputs = np.asarray(outputs, dtype=np.float64)
    outputs = outputs.reshape(outputs.shape[0], -1)
    n_runs = matrix.shape[1]
    if outputs.shape[0] != n_runs:
        raise FitError(f"{n_runs} nodes but outputs of {outputs.shape[0]} runs")
    # a finite sum means finite entries, short of overflow: no mask as large as the data
    if not np.isfinite(outputs.sum()):
        bad = np.flatnonzero(~finite_rows(outputs))
        if bad.size:
            raise FitError(
                f"{bad.size} of {n_runs} runs have outputs that are not finite (first: run "
                f"{bad[0]}); leave failed runs out before fitting"
            )
    if not np.all(np.isfinite(matrix)):
        raise FitError("the basis is not finite at the nodes; check the nodes' range and degree")
    if weights is None:
        return outputs, np.ones(n_runs)
    weights = np.asarray(weights, dtype=np.float64)
    if weights.shape != (n_runs,) or not np.all(weights > 0.0) or not np.all(np.isfinite(weights)):
        raise FitError(f"{n_runs} runs need as many positive finite weights")
    return outputs, weights / weights.mean()


def spread_of(outputs: FloatArray, weights: FloatArray) -> FloatArray:
    """Weighted standard deviation of each output (outputs,); rounding of a constant counts as 0."""
    share = weights / weights.sum()
    mean = share @ outputs
    deviation = outputs - mean
    deviation *= deviation
    spread = np.sqrt(share @ deviation)
    return np.where(spread > 64.0 * np.finfo(np.float64).eps * np.abs(mean), spread, 0.0)
