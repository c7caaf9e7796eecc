"""Bases: orthonormality, gradients, nesting, and degenerate samples."""

import chaospy
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nipc.errors import FitError, InputError
from nipc.expansion import (
    Expansion,
    ProductBasis,
    SampledBasis,
    TensorBasis,
    Whitening,
    explicit,
    hermite,
    hyperbolic,
    legendre,
    recurrence_of,
    total_degree,
)
from nipc.expansion.measures import discretise

DISTRIBUTIONS = {
    "normal": chaospy.Normal(3.0, 2.0),
    "uniform": chaospy.Uniform(-1.0, 5.0),
    "truncated normal": chaospy.TruncNormal(-1.0, 2.0, 0.3, 1.1),
    "lognormal": chaospy.LogNormal(0.1, 0.5),
    "triangular": chaospy.Triangle(0.0, 0.3, 2.0),
    "beta": chaospy.Beta(2.0, 5.0, 1.0, 4.0),
    "exponential": chaospy.Exponential(2.0),
}
BOUNDED = ("uniform", "truncated normal", "triangular", "beta")


@pytest.mark.parametrize("name", DISTRIBUTIONS)
def test_degree_twenty_is_orthonormal_under_its_own_gauss_rule(name):
    family = recurrence_of(DISTRIBUTIONS[name], 20)
    nodes, weights = family.gauss(21)
    values = family.evaluate(nodes)
    np.testing.assert_allclose((values * weights) @ values.T, np.eye(21), atol=1e-10)


@pytest.mark.parametrize("name", BOUNDED)
def test_degree_twenty_is_orthonormal_under_the_density_itself(name):
    family = recurrence_of(DISTRIBUTIONS[name], 20)
    nodes, weights = discretise(DISTRIBUTIONS[name])
    values = family.evaluate(nodes)
    np.testing.assert_allclose((values * weights) @ values.T, np.eye(21), atol=1e-8)


@pytest.mark.parametrize("name", DISTRIBUTIONS)
def test_the_first_polynomial_is_the_standardised_variable(name):
    distribution = DISTRIBUTIONS[name]
    family = recurrence_of(distribution, 2)
    mean = float(distribution.mom(1))
    std = float(np.sqrt(distribution.mom(2) - mean**2))
    x = np.array([0.5, 1.0, 1.5])
    np.testing.assert_allclose(family.evaluate(x)[1], (x - mean) / std, rtol=1e-6)


def test_closed_families_agree_with_those_of_the_distribution():
    x = np.linspace(-2.0, 2.0, 9)
    for closed, distribution in (
        (hermite(20), chaospy.Normal(0, 1)),
        (legendre(20, -3.0, 5.0), chaospy.Uniform(-3.0, 5.0)),
    ):
        np.testing.assert_allclose(
            closed.evaluate(x), recurrence_of(distribution, 20).evaluate(x), rtol=1e-9, atol=1e-9
        )


@settings(deadline=None, max_examples=25)
@given(st.integers(1, 4), st.integers(0, 4), st.sampled_from([0.5, 1.0]), st.integers(0, 9))
def test_product_bases_are_products_of_univariate_values(d, degree, norm, seed):
    indices = hyperbolic(d, degree, norm)
    basis = ProductBasis([hermite(degree)] * d, indices)
    nodes = np.random.default_rng(seed).normal(size=(7, d))
    expected = np.ones((len(indices), 7))
    for v in range(d):
        expected *= hermite(degree).evaluate(nodes[:, v])[indices[:, v]]
    np.testing.assert_allclose(basis.evaluate(nodes), expected, rtol=1e-12, atol=1e-14)


def test_a_set_with_gaps_is_evaluated_through_its_parents():
    indices = explicit([[0, 0, 0], [2, 1, 3], [0, 0, 2]])
    basis = ProductBasis([hermite(3)] * 3, indices)
    x = np.random.default_rng(1).normal(size=(5, 3))
    he2, he1, he3 = (x[:, 0] ** 2 - 1) / 2**0.5, x[:, 1], (x[:, 2] ** 3 - 3 * x[:, 2]) / 6**0.5
    np.testing.assert_allclose(basis.evaluate(x)[2], he2 * he1 * he3, rtol=1e-12)
    np.testing.assert_allclose(basis.evaluate(x)[1], (x[:, 2] ** 2 - 1) / 2**0.5, rtol=1e-12)


def test_more_nodes_than_a_block_change_nothing():
    basis = ProductBasis.standard_normal(3, 3)
    nodes = np.random.default_rng(2).normal(size=(5000, 3))
    whole = basis.evaluate(nodes)
    np.testing.assert_array_equal(whole[:, 4990:], basis.evaluate(nodes[4990:]))
    np.testing.assert_allclose(basis.christoffel(nodes), (whole**2).sum(axis=0), rtol=1e-12)


def correlated(n: int = 4000) -> np.ndarray:
    """Four correlated columns, one of them skew, and a fifth that repeats the second."""
    rng = np.random.default_rng(3)
    x = rng.normal(size=(n, 4)) @ rng.normal(size=(4, 4)) + [1e3, 0.0, -5.0, 1.0]
    x[:, 3] = np.exp(0.2 * x[:, 3])
    return np.column_stack([x, 2.0 * x[:, 1] + 7.0, np.full(n, 4.0)])


@pytest.mark.parametrize("degree", [1, 3, 5])
def test_sampled_bases_are_orthonormal_on_their_samples(degree):
    samples = correlated()
    basis = SampledBasis.from_samples(samples, degree)
    assert basis.whitening.matrix.shape == (6, 4)  # the repeated and the constant one are dropped
    values = basis.evaluate(samples)
    gram = values @ values.T / len(samples)
    np.testing.assert_allclose(gram, np.eye(basis.n_terms), atol=1e-8)


def test_lower_degrees_of_a_sampled_basis_are_the_same_functions():
    samples = correlated()
    high, low = SampledBasis.from_samples(samples, 4), SampledBasis.from_samples(samples, 2)
    cut = high.up_to(2)
    assert np.array_equal(cut.indices, low.indices)
    np.testing.assert_allclose(
        cut.evaluate(samples[:50]), low.evaluate(samples[:50]), rtol=1e-6, atol=1e-7
    )


def test_rank_one_and_rank_zero_samples():
    t = np.random.default_rng(4).normal(size=(500, 1))
    line = SampledBasis.from_samples(t * [1.0, -2.0, 3.0] + 5.0, 3)
    assert line.indices.tolist() == [[0], [1], [2], [3]]
    point = SampledBasis.from_samples(np.full((500, 3), 5.0), 3)
    assert point.n_terms == 1
    assert np.all(point.evaluate(np.full((4, 3), 5.0)) == 1.0)


def test_two_valued_samples_have_no_second_degree():
    sign = np.random.default_rng(5).choice([-1.0, 1.0], size=(400, 1))
    assert SampledBasis.from_samples(sign, 4).n_terms == 2


def test_samples_that_are_not_finite_are_refused():
    samples = correlated(10)
    samples[3, 1] = np.nan
    with pytest.raises(FitError, match="not finite"):
        Whitening.of(samples)


def tensor() -> TensorBasis:
    return TensorBasis.joint(
        SampledBasis.from_samples(correlated(), 3), ProductBasis.standard_normal(3, 2), 3, 1, 3
    )


def test_tensor_basis_keeps_its_three_degrees():
    basis = tensor()
    assert basis.left_degrees.max() == 3
    assert basis.right_degrees.max() == 1
    assert basis.degrees.max() == 3
    assert basis.n_terms == 35 + 3 * 15  # degree 3 of four directions; degree 2 times each noise
    assert np.all(np.diff(basis.degrees) >= 0)


def test_tensor_basis_is_orthonormal_over_all_pairs_of_state_and_noise():
    states = correlated(300)
    left = SampledBasis.from_samples(states, 2)
    basis = TensorBasis.joint(left, ProductBasis.standard_normal(1, 2), 2, 2, 3)
    z, weights = hermite(5).gauss(6)
    nodes = np.column_stack([np.repeat(states, 6, axis=0), np.tile(z, 300)])
    values = basis.evaluate(nodes)
    gram = (values * np.tile(weights / 300, 300)) @ values.T
    np.testing.assert_allclose(gram, np.eye(basis.n_terms), atol=1e-8)


@pytest.mark.parametrize("kind", ["product", "sampled", "part", "tensor"])
def test_gradients_agree_with_central_differences(kind):
    rng = np.random.default_rng(6)
    if kind == "product":
        basis = ProductBasis([hermite(3), legendre(3, 0.0, 2.0), hermite(3)], total_degree(3, 3))
        nodes = rng.uniform(0.2, 1.8, size=(5, 3))
    else:
        sampled = SampledBasis.from_samples(correlated(), 3)
        basis = {"sampled": sampled, "part": sampled.take(np.array([0, 2, 7]))}.get(kind, tensor())
        nodes = correlated()[:5]
        if kind == "tensor":
            nodes = np.hstack([nodes, rng.normal(size=(5, 3))])
    expansion = Expansion(basis, rng.normal(size=(basis.n_terms, 2)))
    gradient = expansion.gradient(nodes)
    assert gradient.shape == (5, basis.n_variables, 2)
    for v in range(basis.n_variables):
        step = np.zeros(basis.n_variables)
        step[v] = 1e-4
        slope = (expansion.evaluate(nodes + step) - expansion.evaluate(nodes - step)) / 2e-4
        np.testing.assert_allclose(gradient[:, v], slope, rtol=1e-4, atol=1e-5)


def test_dependent_distributions_have_no_product_basis():
    joint = chaospy.MvNormal([0, 0], [[1, 0.5], [0.5, 1]])
    with pytest.raises(InputError, match="dependent"):
        ProductBasis.from_distributions(joint, total_degree(2, 2))


def test_a_basis_matrix_beyond_memory_is_refused(monkeypatch):
    basis = ProductBasis.standard_normal(10, 3)
    monkeypatch.setattr("nipc.expansion.memory.physical_memory", lambda: 1_000_000)
    with pytest.raises(FitError, match="286 terms at 10,000 nodes"):
        basis.evaluate(np.zeros((10_000, 10)))
