"""f(m + s (x - m)) as an expansion in x: an arc's expansion with its drivers scaled, exactly.

In one variable p_n(m + s (x - m)) = sum_{k <= n} C_nk(s) p_k(x), since the left side is a
polynomial of degree n; variable after variable that turns the coefficients of a product basis into
those of the scaled function. Moments and shares then have their closed forms again.
"""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.expansion import Expansion, ProductBasis
from nipc.expansion.recurrence import Recurrence


def scaled_expansion(expansion: Expansion, scales: FloatArray) -> Expansion:
    """The expansion of x -> f(m + s (x - m)), with `scales` (variables,) and the means m.

    It has no error estimate: that of f belongs to the unscaled law.
    """
    basis = expansion.basis
    assert isinstance(basis, ProductBasis)
    indices = _closed(basis.indices)
    place = {row.tobytes(): k for k, row in enumerate(indices)}
    shape = expansion.output_shape
    coefficients: FloatArray = np.zeros((indices.shape[0], int(np.prod(shape))))
    coefficients[: basis.n_terms] = expansion.coefficients.reshape(basis.n_terms, -1)
    for v, scale in enumerate(scales):
        degree = int(indices[:, v].max(initial=0))
        if scale != 1.0 and degree:
            change = connection(basis.recurrences[v], float(scale), degree)
            coefficients = _changed(coefficients, indices, place, v, change)
    return Expansion(ProductBasis(basis.recurrences, indices), coefficients.reshape(-1, *shape))


def connection(family: Recurrence, scale: float, degree: int) -> FloatArray:
    """C (degree + 1, degree + 1) in p_n(m + s (x - m)) = sum_k C_nk p_k(x).

    By interpolation at the family's own Gauss nodes, which integrates the products exactly.
    """
    nodes, weights = family.gauss(degree + 1)
    moved = family.evaluate(family.shift + scale * (nodes - family.shift), degree)
    there = family.evaluate(nodes, degree)
    return np.asarray(np.tril((moved * weights) @ there.T))


def _changed(
    coefficients: FloatArray,
    indices: IntArray,
    place: dict[bytes, int],
    variable: int,
    change: FloatArray,
) -> FloatArray:
    result = np.zeros_like(coefficients)
    for n in range(change.shape[0]):
        rows = np.flatnonzero(indices[:, variable] == n)
        if not rows.size:
            continue
        lowered = indices[rows].copy()
        for k in range(n + 1):
            if change[n, k] == 0.0:
                continue
            lowered[:, variable] = k
            targets = [place[row.tobytes()] for row in lowered]
            result[targets] += change[n, k] * coefficients[rows]
    return result


def _closed(indices: IntArray) -> IntArray:
    """The set with, for each index, every one that has a lower degree in some variable."""
    known = {row.tobytes() for row in indices}
    rows, new = [indices], indices
    while new.size:
        found = []
        for v in range(indices.shape[1]):
            lowered = new[new[:, v] > 0].copy()
            lowered[:, v] -= 1
            for row in lowered:
                if row.tobytes() not in known:
                    known.add(row.tobytes())
                    found.append(row)
        new = np.array(found, dtype=indices.dtype).reshape(-1, indices.shape[1])
        rows.append(new)
    return np.ascontiguousarray(np.vstack(rows))
