"""Smolyak sparse grids: Σ_{|l|<=L} (−1)^{L−|l|} C(d−1, L−|l|) ⊗_v Q_{l_v}.

Smolyak (1963); in the combination form of Wasilkowski & Woźniakowski (1995). With univariate rules
exact to degree 2l + 1 at level l the grid of level L is exact to total degree 2L + 1, so that the
variance of a polynomial of degree L is not biased; a rule short of that biases it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import comb
from typing import Any

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.errors import InputError
from nipc.expansion.indices import total_degree
from nipc.expansion.recurrence import recurrence_of

Rule = Callable[[Any, int], tuple[FloatArray, FloatArray]]  # (distribution, level)


def gauss(distribution: Any, level: int) -> tuple[FloatArray, FloatArray]:
    """Gauss rule of level + 1 nodes, exact to degree 2 level + 1; not nested."""
    return recurrence_of(distribution, level + 1).gauss(level + 1)


def leja(distribution: Any, level: int) -> tuple[FloatArray, FloatArray]:
    """Weighted Leja rule of 2 level + 2 nodes (the mean at level 0), exact to degree 2 level + 1;
    nested from level 1 on, for any distribution."""
    if level == 0:
        return gauss(distribution, 0)
    nodes, _ = _chaospy_rule(distribution, 2 * level + 1, "leja")
    # weights that integrate every polynomial through the nodes exactly: Σ_i w_i p_k(x_i) = δ_k0
    values = recurrence_of(distribution, 2 * level + 1).evaluate(nodes)
    return nodes, np.linalg.solve(values, np.eye(nodes.size)[0])


def clenshaw_curtis(distribution: Any, level: int) -> tuple[FloatArray, FloatArray]:
    """Clenshaw–Curtis rule of 2^level + 1 nodes; nested; for bounded, uniform variables."""
    return _chaospy_rule(distribution, 0 if level == 0 else 2**level, "clenshaw_curtis")


RULES: dict[str, Rule] = {"gauss": gauss, "leja": leja, "clenshaw_curtis": clenshaw_curtis}


@dataclass(frozen=True)
class SparseGrid:
    """nodes (n, variables), each once; weights (n,), of either sign, summing to 1."""

    nodes: FloatArray
    weights: FloatArray


def sparse_grid(distributions: Sequence[Any], level: int, rule: str = "gauss") -> SparseGrid:
    """Grid of a level in independent chaospy distributions, one per variable."""
    parts = list(distributions)
    if rule not in RULES:
        raise InputError(f"rule {rule!r}: there are {', '.join(RULES)}")
    if level < 0 or not parts:
        raise InputError(f"level {level} in {len(parts)} variables: a grid needs both")
    n_variables = len(parts)
    cached: dict[str, list[tuple[FloatArray, FloatArray]]] = {}
    rules = []
    for part in parts:
        name = str(part)
        if name not in cached:
            cached[name] = [RULES[rule](part, k) for k in range(level + 1)]
        rules.append(cached[name])
    # univariate nodes are numbered, so that equal ones are equal exactly
    tables, numbers = zip(*(_numbered([nodes for nodes, _ in part]) for part in rules), strict=True)
    keys: list[IntArray] = []
    masses: list[FloatArray] = []
    for index in total_degree(n_variables, level):
        short = level - int(index.sum())
        factor = (-1) ** short * comb(n_variables - 1, short)
        if factor == 0:
            continue
        active = np.flatnonzero(index)
        shape = [numbers[v][index[v]].size for v in active]
        grid = np.indices(shape).reshape(active.size, int(np.prod(shape)))
        key = np.tile([numbers[v][0][0] for v in range(n_variables)], (grid.shape[1], 1))
        mass = np.full(grid.shape[1], float(factor))
        for v, places in zip(active, grid, strict=True):
            key[:, v] = numbers[v][index[v]][places]
            mass *= rules[v][index[v]][1][places]
        keys.append(key)
        masses.append(mass)
    unique, which = np.unique(np.vstack(keys), axis=0, return_inverse=True)
    weights = np.zeros(unique.shape[0])
    np.add.at(weights, np.ravel(which), np.concatenate(masses))
    nodes = np.column_stack([table[unique[:, v]] for v, table in enumerate(tables)])
    return SparseGrid(nodes, weights)


def _numbered(levels: list[FloatArray]) -> tuple[FloatArray, list[IntArray]]:
    """Distinct nodes of all levels, and each level's nodes as numbers among them."""
    everything = np.concatenate(levels)
    scale = np.ptp(everything) or max(1.0, abs(float(everything[0])))
    _, first, which = np.unique(
        np.round((everything - levels[0][0]) / scale, 9), return_index=True, return_inverse=True
    )
    sizes = np.cumsum([nodes.size for nodes in levels])[:-1]
    return everything[first], np.split(np.ravel(which), sizes)


def _chaospy_rule(distribution: Any, order: int, rule: str) -> tuple[FloatArray, FloatArray]:
    import chaospy

    if order == 0:
        return np.ravel(distribution.mom(1)).astype(np.float64), np.ones(1)
    nodes, weights = chaospy.generate_quadrature(order, distribution, rule=rule)
    return np.ravel(nodes), np.ravel(weights) / np.sum(weights)
