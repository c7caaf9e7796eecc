"""Intervals for moments and Sobol' indices, by refitting on randomly weighted runs.

Weights are drawn from a flat Dirichlet distribution (the Bayesian bootstrap, Rubin 1981, Annals of
Statistics 9(1)): every run keeps some weight, so that a fit with hardly more runs than terms stays
determined, where drawing rows with replacement would lose a third of them.

With Ψᵀ = Q R once, a refit is (Qᵀ W Q) a = Qᵀ W y: well conditioned, a batch of small systems.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from nipc.arrays import FloatArray, IntArray
from nipc.errors import FitError
from nipc.expansion.basis import Basis
from nipc.expansion.fits.fit import Fit
from nipc.expansion.shares import Groups, first_shares, total_shares

_BATCH_BYTES = 64 * 2**20


@dataclass(frozen=True)
class Interval:
    """Bounds of equal shape, between which the value lies with the stated probability."""

    low: FloatArray
    high: FloatArray


@dataclass(frozen=True)
class Intervals:
    """mean, std (outputs,); first, total (groups, outputs)."""

    mean: Interval
    std: Interval
    first: Interval
    total: Interval


def bootstrap(
    basis: Basis,
    matrix: FloatArray,
    outputs: FloatArray,
    fit: Fit,
    groups: Groups,
    rng: np.random.Generator,
    replicates: int = 200,
    probability: float = 0.95,
    weights: FloatArray | None = None,
) -> Intervals:
    """Percentile intervals for an expansion fitted on a basis matrix (terms, runs).

    Outputs (runs, outputs) that use the same terms are refitted together; the terms themselves are
    not selected anew. FitError when an output uses more terms than there are runs.
    """
    outputs = outputs.reshape(outputs.shape[0], -1)
    n_runs, n_outputs = outputs.shape
    draws = rng.dirichlet(np.ones(n_runs), size=replicates) * n_runs
    if weights is not None:
        draws *= weights / weights.mean()
    mean, std = np.empty((replicates, n_outputs)), np.empty((replicates, n_outputs))
    first = np.empty((replicates, len(groups), n_outputs))
    total = np.empty_like(first)
    for terms, members in _supports(fit.coefficients):
        if terms.size > n_runs:
            raise FitError(f"{terms.size} terms in use cannot be refitted on {n_runs} runs")
        depends = basis.depends[terms]
        size = max(1, _BATCH_BYTES // (8 * terms.size * (n_runs + terms.size + members.size)))
        for start in range(0, replicates, size):
            batch = slice(start, min(start + size, replicates))
            refits = _refits(matrix[terms], outputs[:, members], draws[batch])
            folded = np.moveaxis(refits, 0, 2)  # (terms, members, replicates)
            mean[batch, members] = refits[:, 0]
            std[batch, members] = np.sqrt(np.sum(refits[:, 1:] ** 2, axis=1))
            for shares, into in ((first_shares, first), (total_shares, total)):
                found = shares(folded, depends, groups)  # (groups, members, replicates)
                into[batch, :, members] = np.moveaxis(found, 2, 0)
    tail = 0.5 * (1.0 - probability)
    return Intervals(*(_interval(values, tail) for values in (mean, std, first, total)))


def _refits(matrix: FloatArray, outputs: FloatArray, draws: FloatArray) -> FloatArray:
    """Coefficients (replicates, terms, outputs) under each row of weights (replicates, runs)."""
    q, r = qr(matrix.T, mode="economic", check_finite=False)
    q = np.asarray(q)
    weighted = draws[:, :, None] * q
    inner = np.linalg.solve(
        np.matmul(q.T, weighted), np.matmul(weighted.transpose(0, 2, 1), outputs)
    )
    inverse = solve_triangular(r, np.eye(r.shape[0]), check_finite=False)
    return np.asarray(np.matmul(inverse, inner))


def _supports(coefficients: FloatArray) -> list[tuple[IntArray, IntArray]]:
    """(terms in use, outputs that use exactly these); the constant always among the terms."""
    used = coefficients != 0.0
    used[0] = True
    patterns, which = np.unique(used, axis=1, return_inverse=True)
    which = np.ravel(which)
    return [
        (np.flatnonzero(patterns[:, k]), np.flatnonzero(which == k))
        for k in range(patterns.shape[1])
    ]


def _interval(values: FloatArray, tail: float) -> Interval:
    low, high = np.quantile(values, [tail, 1.0 - tail], axis=0)
    return Interval(low, high)
