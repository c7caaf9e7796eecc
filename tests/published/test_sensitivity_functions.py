"""Driver shares of two published test functions."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.drivers import PickFreezeAccumulator
from nipc.expansion import ProductBasis, least_squares


def shares(function, dimension, groups, members=60_000, seed=41):
    rng = np.random.default_rng(seed)
    counts = PickFreezeAccumulator([str(g) for g in groups])
    for _ in range(members // 10_000):
        a, b = rng.uniform(size=(2, 10_000, dimension))

        def mixed(columns, a=a, b=b):
            frozen = a.copy()
            frozen[:, columns] = b[:, columns]
            return function(frozen)[:, None, None]

        counts.update(
            function(a)[:, None, None],
            function(b)[:, None, None],
            (mixed(columns) for columns in groups),
        )
    result = counts.result()
    return result.first[:, 0, 0], result.total[:, 0, 0], result


def test_ishigami_and_homma():
    """sin x1 + 7 sin^2 x2 + 0.1 x3^4 sin x1 (Ishigami & Homma 1990; constants of Saltelli 2000):
    first 0.3139, 0.4424, 0; total 0.5576, 0.4424, 0.2437, and from the closed form for {x1, x3}.
    """

    def function(u):
        x = np.pi * (2 * u - 1)
        return np.sin(x[:, 0]) * (1 + 0.1 * x[:, 2] ** 4) + 7 * np.sin(x[:, 1]) ** 2

    first, total, result = shares(function, 3, [[0], [1], [2], [0, 2]])
    np.testing.assert_allclose(first, [0.3139, 0.4424, 0.0, 0.5576], atol=0.02)
    np.testing.assert_allclose(total, [0.5576, 0.4424, 0.2437, 0.5576], atol=0.02)
    variance = 0.1**2 * np.pi**8 / 18 + 0.1 * np.pi**4 / 5 + 7**2 / 8 + 0.5
    assert result.variance[0, 0] == pytest.approx(variance, rel=0.02)


def test_product_function_by_group():
    """prod (|4 u_i - 2| + a_i) / (1 + a_i), a = 0, 1, 4.5, 9 (Sobol' 1993; Saltelli & Sobol' 1995).

    With V_i = 1 / 3 (1 + a_i)^2, a group u has the partial variance prod_u (1 + V_i) - 1; the whole
    prod (1 + V_i) - 1; total of u = 1 - that of the others alone over the whole.
    """
    a = np.array([0.0, 1.0, 4.5, 9.0])
    v = 1 / (3 * (1 + a) ** 2)

    def function(u):
        return np.prod((np.abs(4 * u - 2) + a) / (1 + a), axis=1)

    groups = [[0], [1], [2, 3], [0, 1]]
    first, total, _ = shares(function, 4, groups)
    whole = np.prod(1 + v) - 1
    for k, group in enumerate(groups):
        others = [i for i in range(4) if i not in group]
        assert first[k] == pytest.approx((np.prod(1 + v[group]) - 1) / whole, abs=0.015)
        assert total[k] == pytest.approx(1 - (np.prod(1 + v[others]) - 1) / whole, abs=0.015)


def test_product_of_normal_variables_by_group_in_closed_form():
    """prod (1 + a_i z_i), z standard normal: a group u has prod_u (1 + a_i^2) - 1 of the whole
    prod (1 + a_i^2) - 1 alone (Sobol' 1993, for any product of independent factors of mean one).

    The product is a polynomial, so that its expansion is exact and its sums of squares too.
    """
    a = np.array([1.0, 0.5, 0.25, 0.1])
    groups = [[0], [1], [2, 3], [0, 3]]
    whole = np.prod(1 + a**2) - 1
    basis = ProductBasis.standard_normal(4, 4)
    nodes = np.random.default_rng(43).standard_normal((300, 4))
    values = np.prod(1 + a * nodes, axis=1)[:, None]
    expansion = least_squares(basis.evaluate(nodes), values).expansion(basis)
    assert expansion.variance[0] == pytest.approx(whole, rel=1e-9)
    alone = [(np.prod(1 + a[g] ** 2) - 1) / whole for g in groups]
    others = [[i for i in range(4) if i not in g] for g in groups]
    shared = [1 - (np.prod(1 + a[g] ** 2) - 1) / whole for g in others]
    np.testing.assert_allclose(expansion.first(groups)[:, 0], alone, rtol=1e-9)
    np.testing.assert_allclose(expansion.total(groups)[:, 0], shared, rtol=1e-9)


def test_sum_by_group_in_closed_form():
    """sum c_i z_i: a group has sum_u c_i^2 of sum c_i^2, alone and in total."""
    c = np.array([1.0, 2.0, 3.0, 0.5])
    groups = [[0, 1], [2], [3]]
    basis = ProductBasis.standard_normal(4, 2)
    nodes = np.random.default_rng(44).standard_normal((60, 4))
    expansion = least_squares(basis.evaluate(nodes), (nodes @ c)[:, None]).expansion(basis)
    exact = np.array([np.sum(c[g] ** 2) for g in groups]) / np.sum(c**2)
    np.testing.assert_allclose(expansion.first(groups)[:, 0], exact, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(expansion.total(groups)[:, 0], exact, rtol=1e-9, atol=1e-12)
