"""Least-angle regression: which terms matter, found one after another; then least squares on them.

Efron, Hastie, Johnstone & Tibshirani (2004), Annals of Statistics 32(2). The active set is the
stretch of the path whose least-squares refit has the least corrected leave-one-out error. It finds
sparse expansions from fewer runs than terms.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from nipc.arrays import FloatArray, IntArray
from nipc.errors import FitError
from nipc.expansion.fits.compression import compress
from nipc.expansion.fits.fit import Fit, checked, spread_of

_FEWEST_RUNS = 4
_FIRST_STRETCH = 40  # steps of the path looked at first; as many again while the error still falls
_FULL_LEVERAGE = 1e-6


def least_angle(
    matrix: FloatArray, outputs: FloatArray, *, loss: float = 1e-6, max_terms: int | None = None
) -> Fit:
    """Fit outputs (runs, outputs) sparsely on a basis matrix (terms, runs), constant first.

    Many outputs are standardised and compressed by a singular value decomposition that loses at
    most the share `loss` of their variance (counted in the error), where that saves work; terms are
    then selected per component. `max_terms` bounds every active set.

    FitError with fewer than four runs or outputs that are not finite.
    """
    n_terms, n_runs = matrix.shape
    if n_runs < _FEWEST_RUNS:
        raise FitError(f"{n_runs} runs: least-angle regression needs at least {_FEWEST_RUNS}")
    outputs, weights = checked(matrix, outputs, None)
    spread = spread_of(outputs, weights)
    parts = compress(outputs, spread, loss)
    columns = _Columns.of(matrix)
    most = min(n_runs - 2, columns.usable.size, n_terms - 1)
    if max_terms is not None:
        most = min(most, max(max_terms - 1, 0))

    n_parts = parts.components.shape[1]
    coefficients = np.zeros((n_terms, n_parts))
    left_out = np.empty((n_runs, n_parts))
    corrected = np.empty((n_runs, n_parts))
    leverage = np.zeros(n_runs)
    for k in range(n_parts):
        model = _select(matrix, columns, parts.components[:, k], most)
        coefficients[model.active, k] = model.coefficients
        left_out[:, k] = model.left_out
        corrected[:, k] = model.left_out * np.sqrt(model.correction)
        leverage += model.leverage / n_parts

    folded = coefficients @ parts.mixing
    folded[0] += parts.centre
    loo = _rms(left_out @ parts.mixing, parts.lost)
    ratio = np.where(loo > 0.0, _rms(corrected @ parts.mixing, parts.lost), 1.0)
    return Fit(
        folded,
        loo,
        spread,
        (ratio / np.where(loo > 0.0, loo, 1.0)) ** 2,
        leverage,
        np.count_nonzero(folded, axis=0).astype(np.float64),
    )


@dataclass(frozen=True)
class _Columns:
    """Terms that vary over the runs, centred and of unit length: what the path is made of."""

    unit: FloatArray  # (runs, usable terms)
    gram: FloatArray
    usable: IntArray

    @classmethod
    def of(cls, matrix: FloatArray) -> _Columns:
        centred = matrix[1:] - matrix[1:].mean(axis=1, keepdims=True)
        length = np.sqrt(np.einsum("tn,tn->t", centred, centred))
        size = np.sqrt(np.einsum("tn,tn->t", matrix[1:], matrix[1:]))
        usable = np.flatnonzero(length > 1e-10 * size)
        unit = np.asfortranarray((centred[usable] / length[usable, None]).T)
        return cls(unit, unit.T @ unit, usable + 1)


@dataclass(frozen=True)
class _Model:
    """The refit on one active set; left_out, leverage (runs,)."""

    active: IntArray
    coefficients: FloatArray
    left_out: FloatArray
    correction: float
    leverage: FloatArray


def _select(matrix: FloatArray, columns: _Columns, output: FloatArray, most: int) -> _Model:
    """The best stretch of the path for one output; the path is lengthened while that helps."""
    steps = min(_FIRST_STRETCH, most)
    while True:
        order = _path(columns, output, steps)
        refits = _Refits.along(matrix, np.concatenate([[0], order]), output)
        best = refits.best()
        if best < 0.6 * steps or steps >= most or order.size < steps:
            return refits.model(best)
        steps = min(2 * steps, most)


def entry_order(matrix: FloatArray, output: FloatArray, steps: int) -> IntArray:
    """Terms of a basis matrix (terms, runs) in the order in which the path takes them up."""
    return _path(_Columns.of(matrix), output, steps)


def _path(columns: _Columns, output: FloatArray, steps: int) -> IntArray:
    from sklearn.exceptions import ConvergenceWarning
    from sklearn.linear_model import lars_path

    centred = output - output.mean()
    size = float(np.linalg.norm(centred))
    if steps == 0 or not size > 1e-14 * np.linalg.norm(output):
        return np.zeros(0, dtype=np.int64)
    with warnings.catch_warnings():
        # dependent terms end the path early, which is what is wanted of them
        warnings.simplefilter("ignore", ConvergenceWarning)
        _, active, _ = lars_path(
            columns.unit,
            centred / size,
            Gram=columns.gram,
            method="lar",
            max_iter=steps,
            return_path=False,
        )
    return np.asarray(columns.usable[np.asarray(active, dtype=np.int64)])


@dataclass(frozen=True)
class _Refits:
    """Least-squares refits on the first 1, 2, … terms of an order, from one QR factorisation."""

    order: IntArray
    r: FloatArray
    projected: FloatArray  # (terms,): Qᵀ y
    residuals: FloatArray  # (terms, runs): after each refit
    leverages: FloatArray  # (terms, runs)
    corrections: FloatArray  # (terms,)

    @classmethod
    def along(cls, matrix: FloatArray, order: IntArray, output: FloatArray) -> _Refits:
        n_runs = output.size
        q, r = qr(matrix[order].T, mode="economic", overwrite_a=True, check_finite=False)
        diagonal = np.abs(np.diag(r))
        dependent = np.flatnonzero(diagonal <= 1e-8 * np.linalg.norm(r, axis=0))
        count = int(dependent[0]) if dependent.size else order.size
        order, q, r = order[:count], np.asarray(q)[:, :count], np.asarray(r)[:count, :count]
        projected = q.T @ output
        residuals = output - np.cumsum((q * projected).T, axis=0)
        leverages = np.cumsum((q * q).T, axis=0)
        inverse = solve_triangular(r, np.eye(count), check_finite=False)
        trace = np.cumsum(np.sum(inverse * inverse, axis=0))
        corrections = n_runs / (n_runs - np.arange(1.0, count + 1.0)) * (1.0 + trace)
        return cls(order, r, projected, residuals, leverages, corrections)

    def left_out(self, k: int | slice) -> FloatArray:
        return np.asarray(
            self.residuals[k] / np.maximum(1.0 - self.leverages[k], _FULL_LEVERAGE)
        )

    def best(self) -> int:
        """Position of the last term of the best refit."""
        errors = self.corrections * np.mean(self.left_out(slice(None)) ** 2, axis=1)
        return int(np.argmin(errors))

    def model(self, k: int) -> _Model:
        leading = slice(k + 1)
        return _Model(
            self.order[leading],
            np.asarray(
                solve_triangular(
                    self.r[leading, leading], self.projected[leading], check_finite=False
                )
            ),
            self.left_out(k),
            float(self.corrections[k]),
            np.minimum(self.leverages[k], 1.0),
        )


def _rms(residuals: FloatArray, lost: FloatArray) -> FloatArray:
    """Root mean square over runs of leave-one-out and lost parts together (outputs,)."""
    return np.asarray(np.sqrt(np.mean(residuals * residuals, axis=0) + lost**2))
