"""ChaosRegressor among scikit-learn's estimators; designs and enrichment."""

from __future__ import annotations

import time

import chaospy
import numpy as np
import pytest
from sklearn.model_selection import GridSearchCV, cross_val_score
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.utils.estimator_checks import check_estimator

from nipc.expansion import ChaosRegressor, LatinHypercube, SobolDesign, enrich, hyperbolic


# least squares is refused on fewer runs than terms, and the suite has data of 20 runs in 5 columns
@pytest.mark.parametrize(("method", "degree"), [("least_angle", 2), ("least_squares", 1)])
def test_the_common_suite_of_scikit_learn(method, degree):
    check_estimator(ChaosRegressor(degree=degree, method=method))


def test_in_pipelines_and_searches():
    rng = np.random.default_rng(3)
    x = rng.normal(size=(120, 3))
    y = np.stack([x[:, 0] * x[:, 1], np.sin(x[:, 2]) + x[:, 0]], axis=1)
    model = make_pipeline(StandardScaler(), ChaosRegressor(degree=3))
    assert cross_val_score(model, x, y, cv=4).min() > 0.9
    search = GridSearchCV(ChaosRegressor(), {"degree": [1, 2, 4]}, cv=4).fit(x, y[:, 0])
    assert search.best_params_["degree"] > 1
    assert search.best_estimator_.coef_.ndim == 1
    assert search.best_estimator_.predict(x) == pytest.approx(y[:, 0], abs=1e-6)


@pytest.mark.parametrize("family", [SobolDesign, LatinHypercube])
def test_designs_are_extended_without_losing_a_run(family):
    design = family(4, 9)
    first = design.start(40)
    more = design.extend(first, 40)
    both = np.vstack([first, more])
    assert both.shape == (80, 4)
    assert np.all((both > 0) & (both < 1))
    assert len(np.unique(both, axis=0)) == 80
    assert np.array_equal(first, family(4, 9).start(40))
    # of 80 strata of a variable, random nodes would fill 51 on average
    held = np.array([len(np.unique(np.floor(80 * both[:, k]))) for k in range(4)])
    assert np.all(held >= (80 if family is LatinHypercube else 56))


def test_two_hundred_variables_in_well_under_a_second():
    """2 d + 1 terms of degree 2 at norm 0.5; the bound is a hundred times what it takes."""
    began = time.perf_counter()
    assert hyperbolic(200, 2, 0.5).shape == (401, 200)
    assert time.perf_counter() - began < 60.0


def oscillating(nodes):
    return np.stack([np.sin(nodes[:, 0]) + nodes[:, 1] ** 2, nodes[:, 0] * nodes[:, 1]], axis=1)


def test_enrichment_ends_at_the_tolerance_and_is_right():
    laws = [chaospy.Normal(0, 0.7), chaospy.Uniform(-1, 1)]
    ran = []

    def run(nodes):
        ran.append(len(nodes))
        return oscillating(nodes)

    found = enrich(run, laws, SobolDesign(2, 4), 1e-3, 400, 8)
    assert found.reached
    assert "within the tolerance" in found.reason
    assert sum(ran) == len(found.nodes) < 400
    assert all(n % 8 == 0 for n in ran)
    rng = np.random.default_rng(8)
    fresh = np.stack([0.7 * rng.normal(size=500), rng.uniform(-1, 1, 500)], axis=1)
    truth = oscillating(fresh)
    gap = found.basis.evaluate(fresh).T @ found.fit.coefficients - truth
    assert np.all(gap.std(axis=0) < 4e-3 * truth.std(axis=0))


def test_enrichment_says_when_the_budget_is_spent():
    rng = np.random.default_rng(1)
    found = enrich(
        lambda nodes: rng.normal(size=(len(nodes), 1)),
        [chaospy.Normal(0, 1)] * 3, SobolDesign(3, 4), 1e-2, 40, 8,
    )  # fmt: skip
    assert not found.reached
    assert "budget of 40 runs is spent" in found.reason
    assert len(found.nodes) == 40
