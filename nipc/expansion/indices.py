"""Sets of multi-indices: which products of univariate polynomials an expansion has.

A set is an integer array (terms, variables), the constant first, degrees ascending. Within a degree
the terms follow their parents (the index with its last variable lowered by one), so that runs of
terms share a factor: `products` multiplies them out together. Every set is grown from the constant
one degree at a time; the full tensor of degrees is never formed.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import comb

import numpy as np
import numpy.typing as npt

from nipc.arrays import FloatArray, IntArray
from nipc.errors import InputError
from nipc.expansion.memory import refuse_beyond_memory

_ROUNDING = 1e-10  # of a norm against the degree: 0.1 * 3 is 0.30000000000000004


def total_degree(n_variables: int, degree: int, *, interactions: int | None = None) -> IntArray:
    """Multi-indices with i_1 + … + i_d <= degree, of at most `interactions` variables each."""
    if n_variables >= 0 and degree >= 0 and interactions is None:
        n_terms = comb(n_variables + degree, degree)
        refuse_beyond_memory(8 * n_terms * n_variables, f"an index set of {n_terms:,} terms")
    return weighted(n_variables, degree, interactions=interactions)


def hyperbolic(
    n_variables: int, degree: int, norm: float, *, interactions: int | None = None
) -> IntArray:
    """Multi-indices with (i_1^q + … + i_d^q)^(1/q) <= degree, q = `norm` in (0, 1].

    Blatman & Sudret (2011), Journal of Computational Physics 230(6).
    """
    return weighted(n_variables, degree, norm=norm, interactions=interactions)


def weighted(
    n_variables: int,
    degree: float,
    weights: Sequence[float] | FloatArray | None = None,
    *,
    norm: float = 1.0,
    interactions: int | None = None,
) -> IntArray:
    """Multi-indices with (Σ_k (w_k i_k)^q)^(1/q) <= degree: anisotropic by weights per variable.

    A variable of weight 2 reaches half the degree of one of weight 1; an infinite weight leaves it
    out. `weights` (variables,) are positive, all 1 by default.
    """
    if n_variables < 0 or not degree >= 0:
        raise InputError(f"{n_variables} variables and degree {degree}: neither may be negative")
    if not 0.0 < norm <= 1.0:
        raise InputError(f"norm exponent {norm}: it lies in (0, 1]")
    cost = np.ones(n_variables) if weights is None else np.asarray(weights, dtype=np.float64)
    if cost.shape != (n_variables,) or not np.all(cost > 0.0):
        raise InputError(f"{n_variables} variables need as many positive weights")
    order = n_variables if interactions is None else interactions
    budget = degree**norm * (1.0 + _ROUNDING) + 1e-300
    return _grow(cost**norm, norm, budget, order)


def explicit(rows: npt.ArrayLike) -> IntArray:
    """The given multi-indices, checked and graded; the constant is added when it is missing."""
    given = np.atleast_2d(np.asarray(rows))
    if not np.issubdtype(given.dtype, np.integer) or (given.size and given.min() < 0):
        raise InputError("multi-indices are whole numbers, none negative")
    constant = np.zeros((1, given.shape[1]), dtype=np.int64)
    unique = np.unique(np.vstack([constant, given.astype(np.int64)]), axis=0)[::-1]
    return unique[np.argsort(unique.sum(axis=1), kind="stable")]


def nested_rows(indices: IntArray, within: IntArray) -> IntArray:
    """Row of each of `indices` in the larger set `within`; InputError when one is not there."""
    place = {row.tobytes(): k for k, row in enumerate(np.ascontiguousarray(within))}
    try:
        found = [place[row.tobytes()] for row in np.ascontiguousarray(indices)]
    except KeyError:
        raise InputError("the index set is not contained in the larger one") from None
    return np.array(found, dtype=np.int64)


def _grow(cost: FloatArray, norm: float, budget: float, interactions: int) -> IntArray:
    """All indices with Σ cost_k i_k^norm <= budget, each reached once from its parent."""
    n_variables = cost.size
    columns = np.arange(n_variables)
    layer = np.zeros((1, n_variables), dtype=np.int64)
    spent = np.zeros(1)
    last = np.zeros(1, dtype=np.int64)
    layers, n_terms = [layer], 1
    while layer.size:
        step = cost * ((layer + 1.0) ** norm - layer.astype(np.float64) ** norm)
        active = np.count_nonzero(layer, axis=1)[:, None] + (layer == 0)
        allowed = (
            (columns >= last[:, None])
            & (spent[:, None] + step <= budget)
            & (active <= interactions)
        )
        parents, raised = np.nonzero(allowed)
        if parents.size == 0:
            break
        n_terms += parents.size
        refuse_beyond_memory(
            4 * 8 * n_terms * n_variables, f"an index set of more than {n_terms:,} terms"
        )
        spent = spent[parents] + step[parents, raised]
        layer = layer[parents]
        layer[np.arange(parents.size), raised] += 1
        last = raised
        layers.append(layer)
    return np.vstack(layers)
