"""Fits: exactness, invariances, errors that can be believed, and bad input."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nipc.errors import FitError
from nipc.expansion import (
    ProductBasis,
    SobolDesign,
    bootstrap,
    choose_truncation,
    christoffel_weights,
    cross_validated,
    finite_rows,
    hermite,
    least_angle,
    least_squares,
    quantiles,
)

BASIS = ProductBasis.standard_normal(3, 2)
NODES = np.random.default_rng(1).normal(size=(40, 3))
MATRIX = BASIS.evaluate(NODES)


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 10**6), st.booleans())
def test_least_squares_is_exact_on_polynomials_of_the_basis(seed, weighted):
    coefficients = np.random.default_rng(seed).normal(size=(10, 3))
    weights = christoffel_weights(MATRIX) if weighted else None
    fit = least_squares(MATRIX, MATRIX.T @ coefficients, weights)
    np.testing.assert_allclose(fit.coefficients, coefficients, atol=1e-11)
    assert np.all(fit.relative_error < 1e-11)


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 10**6), st.sampled_from([least_squares, least_angle]))
def test_order_of_runs_does_not_matter(seed, fitter):
    rng = np.random.default_rng(seed)
    outputs = np.exp(0.5 * NODES[:, :1]) * (1 + NODES[:, 1:2])
    order = rng.permutation(40)
    one, two = fitter(MATRIX, outputs), fitter(MATRIX[:, order], outputs[order])
    np.testing.assert_allclose(one.coefficients, two.coefficients, atol=1e-10)
    np.testing.assert_allclose(one.loo, two.loo, rtol=1e-8)


@settings(deadline=None, max_examples=25)
@given(st.floats(1e-3, 1e3), st.floats(-10, 10), st.sampled_from([least_squares, least_angle]))
def test_affine_rescaling_of_an_output_rescales_its_expansion(scale, shift, fitter):
    outputs = np.exp(0.5 * NODES[:, :1]) * (1 + NODES[:, 1:2])
    one, two = fitter(MATRIX, outputs), fitter(MATRIX, scale * outputs + shift)
    np.testing.assert_allclose(two.coefficients[1:] / scale, one.coefficients[1:], atol=1e-6)
    np.testing.assert_allclose(two.relative_error, one.relative_error, rtol=1e-5)


def test_closed_leave_one_out_errors_are_those_of_refitting_without_each_run():
    outputs = np.sin(NODES).sum(axis=1, keepdims=True)
    weights = np.random.default_rng(2).uniform(0.5, 2.0, size=40)
    fit = least_squares(MATRIX, outputs, weights)
    left_out = []
    for i in range(40):
        rest = np.arange(40) != i
        root = np.sqrt(weights[rest])
        c = np.linalg.lstsq((MATRIX[:, rest] * root).T, outputs[rest, 0] * root, rcond=None)[0]
        left_out.append(outputs[i, 0] - MATRIX[:, i] @ c)
    expected = np.sqrt(np.sum(weights * np.square(left_out)) / weights.sum())
    np.testing.assert_allclose(fit.loo, expected, rtol=1e-10)


def test_least_angle_finds_an_exactly_sparse_expansion_from_fewer_runs_than_terms():
    basis = ProductBasis.standard_normal(20, 2)  # 231 terms
    matrix = basis.evaluate(np.random.default_rng(3).normal(size=(80, 20)))
    truth = np.zeros((231, 1))
    truth[[0, 3, 15, 40, 99, 200], 0] = [5.0, 1.0, -2.0, 0.5, 1.0, -0.3]
    fit = least_angle(matrix, matrix.T @ truth)
    np.testing.assert_allclose(fit.coefficients, truth, atol=1e-9)


def test_many_related_outputs_are_fitted_as_well_as_each_alone():
    basis = ProductBasis.standard_normal(10, 2)
    rng = np.random.default_rng(4)
    nodes, fresh = rng.normal(size=(60, 10)), rng.normal(size=(500, 10))
    t = np.linspace(0, 5, 40)

    def history(z):
        return np.exp(-0.3 * z[:, :1]) * np.cos(t + 0.3 * z[:, 1:2]) + 0.1 * z[:, 2:3] * t

    matrix, held = basis.evaluate(nodes), basis.evaluate(fresh)
    together = least_angle(matrix, history(nodes))
    alone = np.column_stack(
        [least_angle(matrix, history(nodes)[:, [k]]).coefficients[:, 0] for k in range(40)]
    )
    truth = history(fresh)
    error = [np.sqrt(np.mean((held.T @ c - truth) ** 2)) for c in (together.coefficients, alone)]
    assert error[0] < 1.3 * error[1]
    assert error[0] < 0.1 * truth.std()


def test_the_estimated_error_is_near_the_true_one():
    # Leave-one-out is unbiased for one run less: over 200 draws of a design the mean estimate over
    # the mean true error is near 1. Its standard error is 0.15 (the estimates are heavy-tailed), so
    # a factor of two is over four of them away on the logarithm; the seed is fixed.
    rng = np.random.default_rng(5)
    fresh = rng.normal(size=(4000, 3))
    truth = np.exp(0.4 * fresh.sum(axis=1))
    held = BASIS.evaluate(fresh)
    ratios = []
    for _ in range(200):
        nodes = rng.normal(size=(60, 3))
        fit = least_squares(BASIS.evaluate(nodes), np.exp(0.4 * nodes.sum(axis=1)))
        true = np.mean((held.T @ fit.coefficients[:, 0] - truth) ** 2)
        ratios.append((fit.loo[0] ** 2, true))
    estimated, real = np.mean(ratios, axis=0)
    assert 0.5 < estimated / real < 2.0


def test_cross_validation_is_not_deceived_by_selection_on_noise():
    # nothing to be found: an honest error over the spread is 1 or more, up to 10 % (seed fixed)
    rng = np.random.default_rng(6)
    basis = ProductBasis.standard_normal(20, 2)
    matrix = basis.evaluate(rng.normal(size=(100, 20)))
    noise = rng.normal(size=(100, 4))
    errors = cross_validated(least_angle, matrix, noise, rng)
    assert np.all(errors > 0.9 * noise.std(axis=0))


def test_truncation_is_chosen_by_the_error():
    nodes = quantiles(SobolDesign(2, 1).start(100))
    outputs = nodes[:, :1] ** 4 + nodes[:, 1:]
    choice = choose_truncation([hermite(8)] * 2, nodes, outputs, least_angle, range(1, 9))
    assert choice.degree >= 4
    assert choice.score < 1e-8
    assert len(choice.tried) > 4


def test_bootstrap_intervals_hold_the_truth():
    # 100 noisy data sets, four quantities of 95 %: coverage below 85 % of 400 has a false-alarm
    # probability below 1e-6 at nominal coverage were they independent
    rng = np.random.default_rng(7)
    truth = np.zeros(10)
    truth[:4] = [1.0, 2.0, -1.0, 0.5]
    std, share = np.sqrt(np.sum(truth[1:] ** 2)), 4.0 / 5.25
    hits = []
    for _ in range(100):
        matrix = BASIS.evaluate(rng.normal(size=(100, 3)))
        outputs = (matrix.T @ truth + 0.3 * rng.normal(size=100))[:, None]
        fit = least_squares(matrix, outputs)
        found = bootstrap(BASIS, matrix, outputs, fit, [[0], [1], [2]], rng)
        hits += [
            found.mean.low[0] <= 1.0 <= found.mean.high[0],
            found.std.low[0] <= std * 1.01 and found.std.high[0] >= std,
            found.first.low[0, 0] <= share <= found.first.high[0, 0],
            found.total.low[0, 0] <= share and found.total.high[0, 0] >= share * 0.99,
        ]
    assert np.mean(hits) > 0.85


def test_bootstrap_keeps_outputs_apart_and_shapes_whole():
    rng = np.random.default_rng(8)
    outputs = np.column_stack([NODES[:, 0], NODES[:, 1] + 0.1 * np.sin(3 * NODES[:, 2])])
    fit = least_angle(MATRIX, outputs)
    found = bootstrap(BASIS, MATRIX, outputs, fit, [[0], [1], [2]], rng, replicates=50)
    assert found.total.low.shape == (3, 2)
    np.testing.assert_allclose(found.total.low[:, 0], [1.0, 0.0, 0.0], atol=1e-9)
    assert found.first.low[1, 1] > 0.9


def test_fewer_runs_than_terms_are_refused_with_the_numbers():
    with pytest.raises(FitError, match="9 runs cannot determine 10 terms"):
        least_squares(MATRIX[:, :9], NODES[:9])
    with pytest.raises(FitError, match="at least 4"):
        least_angle(MATRIX[:, :3], NODES[:3])


def test_as_many_runs_as_terms_interpolate_and_say_that_nothing_checks_them():
    fit = least_squares(MATRIX[:, :10], np.sin(NODES[:10]))
    assert np.all(np.isinf(fit.corrected_error))


def test_duplicate_nodes_are_harmless_while_enough_differ_and_refused_otherwise():
    doubled = np.hstack([MATRIX, MATRIX])
    fit = least_squares(doubled, np.vstack([NODES, NODES]))
    np.testing.assert_allclose(
        fit.coefficients, least_squares(MATRIX, NODES).coefficients, atol=1e-12
    )
    few = np.hstack([MATRIX[:, :8]] * 3)
    with pytest.raises(FitError, match="only 8 of the 10 terms"):
        least_squares(few, np.vstack([NODES[:8]] * 3))


@pytest.mark.parametrize("fitter", [least_squares, least_angle])
def test_constant_outputs_have_no_spread_and_no_shares(fitter):
    outputs = np.column_stack([np.full(40, 1e6), np.zeros(40), NODES[:, 0], NODES[:, 1]])
    fit = fitter(MATRIX, outputs)
    assert fit.spread[:2].tolist() == [0.0, 0.0]
    assert np.all(fit.relative_error[:2] == 0.0)
    expansion = fit.expansion(BASIS)
    assert expansion.constant.tolist() == [True, True, False, False]
    assert np.all(np.isnan(expansion.total()[:, :2]))
    assert np.all(np.isnan(expansion.nonlinear_share()[:2]))
    np.testing.assert_allclose(expansion.mean[:2], [1e6, 0.0])
    np.testing.assert_allclose(expansion.first()[:, 2], [1.0, 0.0, 0.0], atol=1e-12)


@pytest.mark.parametrize("fitter", [least_squares, least_angle])
def test_runs_that_are_not_finite_are_refused_and_can_be_left_out(fitter):
    outputs = NODES.copy()
    outputs[5, 1], outputs[7, 0] = np.nan, np.inf
    with pytest.raises(FitError, match=r"2 of 40 runs .*first: run 5"):
        fitter(MATRIX, outputs)
    fine = finite_rows(outputs)
    assert np.flatnonzero(~fine).tolist() == [5, 7]
    assert fitter(MATRIX[:, fine], outputs[fine]).relative_error.max() < 1e-10


@pytest.mark.parametrize("fitter", [least_squares, least_angle])
def test_degree_zero_is_the_mean(fitter):
    basis = ProductBasis.standard_normal(3, 0)
    outputs = np.random.default_rng(9).normal(size=(20, 2))
    fit = fitter(basis.evaluate(NODES[:20]), outputs)
    np.testing.assert_allclose(fit.coefficients, outputs.mean(axis=0)[None])
    assert fit.expansion(basis).constant.all()


def test_wrong_weights_and_shapes_are_refused():
    with pytest.raises(FitError, match="positive finite weights"):
        least_squares(MATRIX, NODES, np.zeros(40))
    with pytest.raises(FitError, match="outputs of 39 runs"):
        least_squares(MATRIX, NODES[:39])
