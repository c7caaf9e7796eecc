"""Variance shares of any expansion: what must hold whatever the coefficients."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nipc.expansion import Expansion, ProductBasis

BASIS = ProductBasis.standard_normal(4, 3)
SEEDS = st.integers(0, 2**32 - 1)


def expansion(seed: int, scale: float = 1.0, shift: float = 0.0) -> Expansion:
    coefficients = np.random.default_rng(seed).normal(size=(BASIS.n_terms, 3))
    coefficients[0] += shift
    return Expansion(BASIS, coefficients * scale)


@settings(max_examples=40, deadline=None)
@given(seed=SEEDS)
def test_shares_of_all_groups_sum_to_one(seed):
    """First shares of the groups and of their union: S_A + S_B + S_AB = 1, T_A = 1 - S_B."""
    found = expansion(seed)
    groups = [[0, 2], [1, 3]]
    first, total = found.first(groups), found.total(groups)
    interaction = 1.0 - first.sum(axis=0)
    assert np.all(interaction >= -1e-12)
    assert total[0] == pytest.approx(1.0 - first[1], abs=1e-12)
    assert total[1] == pytest.approx(1.0 - first[0], abs=1e-12)
    assert first.sum(axis=0) + interaction == pytest.approx(np.ones(3), abs=1e-12)
    assert found.first([[0, 1, 2, 3]])[0] == pytest.approx(np.ones(3), abs=1e-12)
    assert found.degree_shares().sum(axis=0) == pytest.approx(np.ones(3), abs=1e-12)


@settings(max_examples=40, deadline=None)
@given(seed=SEEDS, scale=st.floats(-1e3, 1e3).filter(lambda s: abs(s) > 1e-3))
def test_affine_rescaling_changes_no_share(seed, scale):
    plain, scaled = expansion(seed), expansion(seed, scale, 0.0)
    assert scaled.total() == pytest.approx(plain.total(), abs=1e-10)
    assert expansion(seed, 1.0, 1e6).first() == pytest.approx(plain.first(), abs=1e-9)
    assert scaled.std == pytest.approx(abs(scale) * plain.std, rel=1e-12)


@settings(max_examples=20, deadline=None)
@given(seed=SEEDS)
def test_moments_agree_with_quadrature(seed):
    """By a tensor Gauss-Hermite rule that is exact for the squared polynomial."""
    found = expansion(seed)
    nodes, weights = np.polynomial.hermite_e.hermegauss(5)
    grid = np.stack([g.ravel() for g in np.meshgrid(*[nodes] * 4, indexing="ij")], axis=1)
    weight = np.prod(np.meshgrid(*[weights / weights.sum()] * 4, indexing="ij"), axis=0).ravel()
    values = found.evaluate(grid)
    assert weight @ values == pytest.approx(found.mean, abs=1e-9)
    assert weight @ (values - found.mean) ** 2 == pytest.approx(found.variance, rel=1e-9)


def test_an_output_without_variance_has_no_shares():
    coefficients = np.zeros((BASIS.n_terms, 2))
    coefficients[0] = 3.0
    coefficients[1, 1] = 2.0
    found = Expansion(BASIS, coefficients)
    assert found.constant.tolist() == [True, False]
    assert np.isnan(found.total()[:, 0]).all()
    assert found.total()[:, 1].sum() == pytest.approx(1.0)
