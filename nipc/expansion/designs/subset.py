"""The best few of many candidate nodes: near D-optimal, by pivoted QR.

Columns √w(x) Ψ(x), with Christoffel weights w so that all have the same length, are picked greedily
by what they add to those already picked (Businger & Golub 1965). Once every term is determined the
picking starts anew among the remaining candidates.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr

from nipc.arrays import FloatArray, IntArray
from nipc.errors import FitError
from nipc.expansion.basis import Basis
from nipc.expansion.fits.least_squares import christoffel_weights

_DETERMINED = 1e-6  # relative size below which nodes do not tell a combination of terms


@dataclass(frozen=True)
class Subset:
    """rows (n_runs,): picked candidates, in the order of picking; weights (n_runs,) for the fit."""

    rows: IntArray
    weights: FloatArray


def near_optimal_subset(
    basis: Basis,
    candidates: FloatArray,
    n_runs: int,
    rng: np.random.Generator,
    taken: FloatArray | None = None,
) -> Subset:
    """Pick n_runs of candidates (n, variables) for a least-squares fit on the basis.

    `taken` (m, variables): nodes already run, which the picks complement. Of very many candidates
    a random part is looked at, those of high leverage preferred.
    """
    n_terms = basis.n_terms
    if candidates.shape[0] < n_runs:
        raise FitError(f"{candidates.shape[0]} candidates cannot give {n_runs} nodes")
    looked_at = np.arange(candidates.shape[0])
    n_looked = max(4 * n_runs, 3 * n_terms, 200)
    if n_looked < looked_at.size:
        leverage = basis.christoffel(candidates)
        # Gumbel trick: a sample without replacement, with chances in proportion to leverage
        keys = np.log(leverage) + rng.gumbel(size=leverage.size)
        looked_at = np.sort(np.argpartition(-keys, n_looked - 1)[:n_looked])
    matrix = basis.evaluate(candidates[looked_at])
    weights = christoffel_weights(matrix)
    matrix *= np.sqrt(weights)

    picked: list[IntArray] = []
    left = np.arange(looked_at.size)
    missing = n_runs
    if taken is not None and taken.shape[0]:
        first = _complement(basis, taken, matrix, n_runs)
        picked.append(first)
        left = np.setdiff1d(left, first)
        missing -= first.size
    while missing > 0:
        order = _pivots(matrix[:, left])[:missing]
        picked.append(left[order])
        left = np.delete(left, order)
        missing -= order.size
    rows = np.concatenate(picked)
    return Subset(looked_at[rows], weights[rows])


def _pivots(matrix: FloatArray) -> IntArray:
    """Columns in the order in which pivoted QR takes them, as many as there are rows."""
    _, pivots = qr(matrix, mode="r", pivoting=True, check_finite=False)
    return np.asarray(pivots[: matrix.shape[0]], dtype=np.int64)


def _complement(basis: Basis, taken: FloatArray, matrix: FloatArray, n_runs: int) -> IntArray:
    """Picks for the terms that the taken nodes leave undetermined, however many they are."""
    held = basis.evaluate(taken)
    held *= np.sqrt(christoffel_weights(held))
    directions, sizes, _ = np.linalg.svd(held, full_matrices=False)
    span = directions[:, sizes > _DETERMINED * sizes[0]]
    rest = matrix - span @ (span.T @ matrix)
    count = min(n_runs, basis.n_terms - span.shape[1])
    return _pivots(rest)[:count]
