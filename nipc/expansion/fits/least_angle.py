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
_MOST_PATHS = 6
_WORTHWHILE = 0.5  # of the squared error; less of a fall may be chance
_EXACT = 1e-24  # of the output's square: rounding


def least_angle(
    matrix: FloatArray, outputs: FloatArray, *, loss: float = 1e-6, max_terms: int | None = None
) -> Fit:
    """Fit outputs (runs, outputs) sparsely on a basis matrix (terms, runs), constant first.

    Many outputs are standardised and compressed by a singular value decomposition that loses at
    most the share `loss` of their variance (counted in the error), where that saves work; terms are
    then selected per component. `max_terms` bounds every active set.

    The error is of the selected terms: having been selected by it, it is too low by a factor of up
    to two where no sparse expansion exists; `cross_validated` selects anew in every fold.

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
        coefficients[model.order, k] = model.coefficients
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

    def beyond(self, held: FloatArray) -> _Columns:
        """What is left of the columns beside the held terms (held, runs)."""
        q, _ = qr(held.T, mode="economic", check_finite=False)
        rest = self.unit - q @ (q.T @ self.unit)
        length = np.sqrt(np.einsum("nt,nt->t", rest, rest))
        usable = np.flatnonzero(length > 1e-6)
        unit = np.asfortranarray(rest[:, usable] / length[usable])
        return _Columns(unit, unit.T @ unit, self.usable[usable])


@dataclass(frozen=True)
class _Model:
    """The refit on one active set; left_out, leverage (runs,)."""

    order: IntArray
    coefficients: FloatArray
    left_out: FloatArray
    correction: float
    leverage: FloatArray

    @property
    def score(self) -> float:
        """Corrected mean square of the leave-one-out residuals."""
        return float(self.correction * np.mean(self.left_out**2))


def _select(matrix: FloatArray, columns: _Columns, output: FloatArray, most: int) -> _Model:
    """The best active set for one output.

    A path takes up terms by their correlation with what is left, and chance correlations with large
    terms crowd out small true ones. So its terms are sorted by their refitted coefficients and cut
    anew; then a further path is walked in what the kept terms leave over, as long as that halves
    the squared error.
    """
    best = _walk(matrix, columns, output, np.zeros(1, dtype=np.int64), most)
    for _ in range(_MOST_PATHS - 1):
        if best.order.size > most or best.score <= _EXACT * float(np.mean(output * output)):
            break
        further = _walk(matrix, columns.beyond(matrix[best.order]), output, best.order, most)
        if not further.score < _WORTHWHILE * best.score:
            break
        best = further
    return best


def _walk(
    matrix: FloatArray, columns: _Columns, output: FloatArray, held: IntArray, most: int
) -> _Model:
    """The best refit along a path that starts from the held terms, lengthened while that helps."""
    steps = min(_FIRST_STRETCH, most + 1 - held.size)
    while True:
        q, _ = qr(matrix[held].T, mode="economic", check_finite=False)
        path = _path(columns, output - q @ (q.T @ output), steps)
        refits = _Refits.along(matrix, np.concatenate([held, path]), output)
        found = refits.best()
        if found < held.size + 0.6 * steps or steps >= most + 1 - held.size or path.size < steps:
            break
        steps = min(2 * steps, most + 1 - held.size)
    # the constant stays first; the others by what they contribute
    stretch = refits.model(min(found + 10, refits.order.size - 1))
    by_size = 1 + np.argsort(-np.abs(stretch.coefficients[1:]), kind="stable")
    resorted = _Refits.along(matrix, stretch.order[np.concatenate([[0], by_size])], output)
    return min(
        (refits.model(found), resorted.model(resorted.best())), key=lambda model: model.score
    )


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
        return np.asarray(self.residuals[k] / np.maximum(1.0 - self.leverages[k], _FULL_LEVERAGE))

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
