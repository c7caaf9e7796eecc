"""Least-angle regression: which terms matter, found one after another; then least squares on them.

Efron, Hastie, Johnstone & Tibshirani (2004), Annals of Statistics 32(2). Active sets
are stretches of the path, judged by the corrected leave-one-out error of their least-squares
refits; refits that do about as well are averaged. It finds sparse expansions from fewer runs than
terms.
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
_STRETCH = 40  # steps of the path looked at first; as many again while the error still falls
_FULL_LEVERAGE = 1e-6
_SHARPNESS = 0.05  # weights of refits go with their squared error to the power −0.05 n
_MOST_PATHS = 6
_WORTHWHILE = 0.5  # of the squared error; less of a fall may be chance
_EXACT = 1e-24  # of the output's square: rounding


def least_angle(
    matrix: FloatArray, outputs: FloatArray, *, loss: float = 1e-6, max_terms: int | None = None
) -> Fit:
    """Fit outputs (runs, outputs) sparsely on a basis matrix (terms, runs), constant first.

    Many outputs are standardised and compressed by a singular value decomposition that loses at
    most the share `loss` of their variance, where that saves work: paths are walked per component,
    and each output then takes what it needs of the terms found, refitted to all of it.
    `max_terms` bounds every active set.

    The error is of the selected terms: having been selected by it, it is too low by a factor of up
    to two where no sparse expansion exists; `cross_validated` selects anew in every fold.

    FitError with fewer than four runs or outputs that are not finite.
    """
    n_terms, n_runs = matrix.shape
    if n_runs < _FEWEST_RUNS:
        raise FitError(f"{n_runs} runs: least-angle regression needs at least {_FEWEST_RUNS}")
    outputs, weights = checked(matrix, outputs, None)
    spread = spread_of(outputs, weights)
    alive = np.flatnonzero(spread > 0.0)
    columns = _Columns.of(matrix)
    most = min(n_runs - 2, columns.usable.size, n_terms - 1)
    if max_terms is not None:
        most = min(most, max(max_terms - 1, 0))

    components, mixing = compress(outputs[:, alive], spread[alive], loss)
    models = [_select(matrix, columns, column, most) for column in components.T]
    if mixing is not None:
        found = np.zeros((n_terms, len(models)))
        for k, model in enumerate(models):
            found[model.order, k] = model.coefficients
        sizes = np.abs(found @ mixing)
        models = [
            _cut_by_size(matrix, outputs[:, o], sizes[:, k], most) for k, o in enumerate(alive)
        ]
    return _gathered(models, outputs, alive, spread, n_terms)


def _cut_by_size(matrix: FloatArray, output: FloatArray, sizes: FloatArray, most: int) -> _Model:
    """Of the terms that the components use, those that this output needs, the largest first."""
    candidates = 1 + np.argsort(-sizes[1:], kind="stable")
    count = min(np.count_nonzero(sizes[1:]), most, output.size // 2)
    order = np.concatenate([[0], candidates[:count]])
    return _Refits.along(matrix, order, output).averaged()


def _gathered(
    models: list[_Model], outputs: FloatArray, alive: IntArray, spread: FloatArray, n_terms: int
) -> Fit:
    """The models of the varying outputs in one fit; constant outputs are their constant."""
    n_runs, n_outputs = outputs.shape
    coefficients = np.zeros((n_terms, n_outputs))
    coefficients[0] = outputs.mean(axis=0)
    loo, correction = np.zeros(n_outputs), np.ones(n_outputs)
    used = np.ones(n_outputs)
    leverage = np.zeros(n_runs)
    for o, model in zip(alive, models, strict=True):
        coefficients[:, o] = 0.0
        coefficients[model.order, o] = model.coefficients
        loo[o] = np.sqrt(np.mean(model.left_out**2))
        correction[o] = model.correction
        used[o] = model.order.size
        leverage += model.leverage / alive.size
    return Fit(coefficients, loo, spread, correction, leverage, used)


@dataclass(frozen=True)
class _Columns:
    """Terms that vary over the runs, centred and of unit length: what the path is made of."""

    unit: FloatArray  # (runs, usable terms)
    usable: IntArray

    @classmethod
    def of(cls, matrix: FloatArray) -> _Columns:
        centred = matrix[1:] - matrix[1:].mean(axis=1, keepdims=True)
        length = np.sqrt(np.einsum("tn,tn->t", centred, centred))
        size = np.sqrt(np.einsum("tn,tn->t", matrix[1:], matrix[1:]))
        usable = np.flatnonzero(length > 1e-10 * size)
        unit = np.asfortranarray((centred[usable] / length[usable, None]).T)
        return cls(unit, usable + 1)

    def beyond(self, held: FloatArray) -> _Columns:
        """What is left of the columns beside the held terms (held, runs)."""
        q, _ = qr(held.T, mode="economic", check_finite=False)
        rest = self.unit - q @ (q.T @ self.unit)
        length = np.sqrt(np.einsum("nt,nt->t", rest, rest))
        usable = np.flatnonzero(length > 1e-6)
        unit = np.asfortranarray(rest[:, usable] / length[usable])
        return _Columns(unit, self.usable[usable])


@dataclass(frozen=True)
class _Model:
    """An average of refits; left_out, leverage (runs,)."""

    order: IntArray
    coefficients: FloatArray
    left_out: FloatArray
    correction: float
    leverage: FloatArray


@dataclass(frozen=True)
class _Cut:
    """The best of a sequence of refits: that on the terms of the order up to `last`."""

    refits: _Refits
    last: int
    score: float

    @property
    def held(self) -> IntArray:
        return self.refits.order[: self.last + 1]


def _select(matrix: FloatArray, columns: _Columns, output: FloatArray, most: int) -> _Model:
    """The best active set for one output.

    A path takes up terms by their correlation with what is left, and chance correlations with large
    terms crowd out small true ones. So its terms are sorted by their refitted coefficients and cut
    anew; then a further path is walked in what the kept terms leave over, as long as that halves
    the squared error.
    """
    best = _walk(matrix, columns, output, np.zeros(1, dtype=np.int64), most)
    for _ in range(_MOST_PATHS - 1):
        if best.last >= most or best.score <= _EXACT * float(np.mean(output * output)):
            break
        further = _walk(matrix, columns.beyond(matrix[best.held]), output, best.held, most)
        if not further.score < _WORTHWHILE * best.score:
            break
        best = further
    return best.refits.averaged()


def _walk(
    matrix: FloatArray, columns: _Columns, output: FloatArray, held: IntArray, most: int
) -> _Cut:
    """The best refit along a path that starts from the held terms, lengthened while that helps."""
    q, _ = qr(matrix[held].T, mode="economic", check_finite=False)
    rest = output - q @ (q.T @ output)
    longest = most + 1 - held.size
    steps = min(_STRETCH if held.size == 1 else _STRETCH // 2, longest)
    while True:
        path = _path(columns, rest, steps)
        found = _Refits.along(matrix, np.concatenate([held, path]), output).best()
        if found.last < held.size + 0.6 * steps or steps >= longest or path.size < steps:
            break
        steps = min(2 * steps, longest)
    # the constant stays first; the others by what they contribute
    terms, sizes = found.refits.stretch(found.last + 10)
    by_size = np.concatenate([[0], 1 + np.argsort(-np.abs(sizes[1:]), kind="stable")])
    resorted = _Refits.along(matrix, terms[by_size], output).best()
    return min(found, resorted, key=lambda cut: cut.score)


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

    def errors(self) -> FloatArray:
        """Corrected mean square of the leave-one-out residuals of each refit: (terms,)."""
        return np.asarray(self.corrections * np.mean(self.left_out(slice(None)) ** 2, axis=1))

    def best(self) -> _Cut:
        errors = self.errors()
        last = int(np.argmin(errors))
        return _Cut(self, last, float(errors[last]))

    def stretch(self, n_terms: int) -> tuple[IntArray, FloatArray]:
        """The leading terms of the order and their refitted coefficients."""
        kept = slice(n_terms)
        solved = solve_triangular(self.r[kept, kept], self.projected[kept], check_finite=False)
        return self.order[kept], np.asarray(solved)

    def averaged(self) -> _Model:
        """The refits near the best, averaged (Buckland, Burnham & Augustin 1997).

        Weights fall with the error, far more gently than likelihoods would: the errors of refits
        along one path hardly differ by more than chance.
        """
        errors = self.errors()
        floor = max(float(errors.min()), 1e-300)
        weights = np.maximum(errors / floor, 1.0) ** (-_SHARPNESS * self.residuals.shape[1])
        weights[weights < 1e-3] = 0.0
        weights /= weights.sum()
        kept = slice(int(np.flatnonzero(weights)[-1]) + 1)
        # a coefficient of Q is in every refit that goes as far: R_k⁻¹ is a corner of R⁻¹
        shares = np.cumsum(weights[::-1])[::-1][kept]
        coefficients = solve_triangular(
            self.r[kept, kept], shares * self.projected[kept], check_finite=False
        )
        return _Model(
            self.order[kept],
            np.asarray(coefficients),
            np.asarray(weights @ self.left_out(slice(None))),
            float(weights @ self.corrections),
            np.minimum(weights @ self.leverages, 1.0),
        )
