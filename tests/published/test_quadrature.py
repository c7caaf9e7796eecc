"""Gauss rules and sparse grids against printed tables.

Sources: Abramowitz & Stegun (1964), table 25.10 (Gauss-Hermite) and 25.4 (Gauss-Legendre), from
memory; the number of distinct nodes of a Smolyak grid counted by hand from its tensor rules.
"""

from __future__ import annotations

from math import comb

import chaospy
import numpy as np
import pytest

from nipc.expansion import LatinHypercube, SobolDesign, quantiles, sparse_grid
from nipc.expansion.recurrence import hermite, legendre

# 25.10, weight exp(-x^2): positive abscissas and weights
HERMITE = {
    2: ([0.7071067811865475], [0.8862269254527580]),
    3: ([0.0, 1.2247448713915890], [1.1816359006036772, 0.2954089751509193]),
    5: (
        [0.0, 0.9585724646138185, 2.0201828704560856],
        [0.9453087204829419, 0.3936193231522412, 0.01995324205904591],
    ),
}
LEGENDRE = {
    3: ([0.0, 0.7745966692414834], [0.8888888888888889, 0.5555555555555556]),
    5: (
        [0.0, 0.5384693101056831, 0.9061798459386640],
        [0.5688888888888889, 0.4786286704993665, 0.2369268850561891],
    ),
}


@pytest.mark.parametrize("count", sorted(HERMITE))
def test_gauss_hermite_nodes(count):
    """For a standard normal variable the table's x is z / sqrt 2 and its weight w sqrt pi."""
    nodes, weights = hermite(count).gauss(count)
    keep = nodes > -1e-9
    abscissas, printed = HERMITE[count]
    assert np.sort(nodes[keep]) / np.sqrt(2) == pytest.approx(abscissas, abs=1e-12)
    assert weights[keep] * np.sqrt(np.pi) == pytest.approx(printed, abs=1e-12)


@pytest.mark.parametrize("count", sorted(LEGENDRE))
def test_gauss_legendre_nodes(count):
    nodes, weights = legendre(count).gauss(count)
    keep = nodes > -1e-9
    abscissas, printed = LEGENDRE[count]
    assert np.sort(nodes[keep]) == pytest.approx(abscissas, abs=1e-12)
    assert 2 * weights[keep] == pytest.approx(printed, abs=1e-12)


@pytest.mark.parametrize("d", [2, 4, 14])
def test_sparse_grid_node_counts(d):
    """Level 1: the centre and two nodes an axis. Level 2: also two more an axis and 4 a pair."""
    normal = [chaospy.Normal(0, 1)] * d
    assert len(sparse_grid(normal, 1).nodes) == 2 * d + 1
    assert len(sparse_grid(normal, 2).nodes) == 1 + 4 * d + 4 * comb(d, 2)


def test_sparse_grid_integrates_what_it_should():
    """Level l is exact for total degree 2 l + 1; moments of the normal and the uniform."""
    grid = sparse_grid([chaospy.Normal(0, 1), chaospy.Uniform(-1, 1), chaospy.Normal(0, 1)], 2)
    x, y, z = grid.nodes.T
    assert grid.weights.sum() == pytest.approx(1.0)
    assert grid.weights @ x**4 == pytest.approx(3.0)
    assert grid.weights @ (x**2 * y**2) == pytest.approx(1 / 3)
    assert grid.weights @ (x**2 * z**2) == pytest.approx(1.0)
    assert grid.weights @ (y**4 * x) == pytest.approx(0.0, abs=1e-12)
    assert len(np.unique(np.round(grid.nodes, 9), axis=0)) == len(grid.nodes)


def test_sparse_grid_agrees_with_chaospy():
    joint = chaospy.J(*[chaospy.Normal(0, 1) for _ in range(3)])
    nodes, weights = chaospy.generate_quadrature(2, joint, rule="gaussian", sparse=True)
    ours = sparse_grid([chaospy.Normal(0, 1)] * 3, 2)
    for power in ((2, 0, 0), (2, 2, 0), (4, 0, 0), (3, 1, 0), (6, 0, 0)):
        theirs = weights @ np.prod(nodes.T ** np.array(power), axis=1)
        assert ours.weights @ np.prod(ours.nodes ** np.array(power), axis=1) == pytest.approx(
            theirs, abs=1e-10
        )


def test_quasi_random_nodes_can_be_extended_and_stratify():
    laws = [chaospy.Normal(0, 1), chaospy.Uniform(0, 2)]
    first = SobolDesign(2, 3).start(32)
    assert np.array_equal(SobolDesign(2, 3).start(64)[:32], first)
    nodes = quantiles(LatinHypercube(2, 3).start(50), laws)
    cells = np.floor(nodes[:, 1] / 2 * 50)
    assert sorted(cells) == list(range(50))
