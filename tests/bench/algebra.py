"""Speed of the expansion engine's algebra against general-purpose libraries on the same data."""

from __future__ import annotations

import time
import warnings
from typing import Any

import chaospy
import numpy as np
from measure import at_least, at_most, growth, peak_megabytes, stated, times
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import LassoLarsCV, LinearRegression

from nipc.expansion import Expansion, ProductBasis, least_angle, least_squares


def rows() -> list[dict[str, Any]]:
    return [
        *_moments(),
        *_basis(),
        *_least_squares(),
        *_least_angle_histories(),
        *_least_angle_unrelated(),
        *_evaluation(),
        *_growth(),
    ]


def _moments() -> list[dict[str, Any]]:
    """Standard deviations and total indices, 66 terms (d = 10, degree 2), 50 outputs."""
    rng = np.random.default_rng(1)
    basis = ProductBasis.standard_normal(10, 2)
    coefficients = rng.normal(size=(basis.n_terms, 50))
    joint = chaospy.Iid(chaospy.Normal(0, 1), 10)
    symbols = chaospy.generate_expansion(2, joint, normed=True, graded=True, reverse=True)
    # the library orders its terms otherwise: match them by their values at a few points
    points = rng.normal(size=(200, 10))
    match = np.argmax(
        np.abs(np.corrcoef(basis.evaluate(points)[1:], symbols(*points.T)[1:])[:65, 65:]), axis=1
    )
    order = np.concatenate([[0], match + 1])
    reordered = np.empty_like(coefficients)
    reordered[order] = coefficients
    polynomials = chaospy.sum(symbols[:, None] * reordered, axis=0)

    def ours() -> tuple[np.ndarray, np.ndarray]:
        expansion = Expansion(basis, coefficients)
        return expansion.std, expansion.total()

    start = time.perf_counter()
    std, total = chaospy.Std(polynomials, joint), chaospy.Sens_t(polynomials, joint)
    theirs = time.perf_counter() - start
    (mine,) = times(ours, repeats=20)
    found = ours()
    gap = max(np.abs(found[0] - std).max(), np.abs(found[1] - total).max())
    name = "std and total indices, 66 terms x 50 outputs"
    return [
        at_least(f"{name}, against chaospy", theirs / mine, 1000),
        at_most(f"{name}, largest difference", gap, 1e-10),
        stated(f"{name}, peak memory", peak_megabytes(ours), "MB"),
    ]


def _basis() -> list[dict[str, Any]]:
    rng = np.random.default_rng(2)
    basis = ProductBasis.standard_normal(40, 2)
    nodes = rng.normal(size=(2000, 40))
    symbols = chaospy.generate_expansion(2, chaospy.Iid(chaospy.Normal(0, 1), 40), normed=True)
    (mine,) = times(lambda: basis.evaluate(nodes), repeats=10)
    (theirs,) = times(lambda: symbols(*nodes.T), repeats=1)
    same = np.sort(symbols(*nodes[:5].T), axis=0) - np.sort(basis.evaluate(nodes[:5]), axis=0)
    name = "basis evaluation, d = 40, degree 2, 2,000 samples"
    return [
        at_least(f"{name}, against chaospy", theirs / mine, 300),
        at_most(f"{name}, largest difference", float(np.abs(same).max()), 1e-10),
        stated(f"{name}, peak memory", peak_megabytes(lambda: basis.evaluate(nodes)), "MB"),
    ]


def _least_squares() -> list[dict[str, Any]]:
    rng = np.random.default_rng(3)
    basis = ProductBasis.standard_normal(10, 3)
    matrix = basis.evaluate(rng.normal(size=(600, 10)))
    outputs = rng.normal(size=(600, 4000))
    columns = np.ascontiguousarray(matrix.T)
    reference = LinearRegression(fit_intercept=False)
    mine, theirs = times(
        lambda: least_squares(matrix, outputs), lambda: reference.fit(columns, outputs), repeats=3
    )
    fit = least_squares(matrix, outputs)
    gap = np.abs(fit.coefficients.T - reference.coef_).max() / np.abs(reference.coef_).max()
    name = "least squares with its errors, 286 terms x 600 runs x 4,000 outputs"
    return [
        at_least(f"{name}, against LinearRegression", theirs / mine, 3),
        at_most(f"{name}, largest difference", gap, 1e-10),
        stated(
            f"{name}, peak memory", peak_megabytes(lambda: least_squares(matrix, outputs)), "MB"
        ),
    ]


def _histories(z: np.ndarray) -> np.ndarray:
    """A damped oscillation with uncertain amplitude, damping, frequency, phase and drifts."""
    t = np.linspace(0.0, 20.0, 1000)
    a, b, c, d = (z[:, [k]] for k in range(4))
    swing = (1 + 0.3 * a) * np.exp(-t * (0.1 + 0.02 * b)) * np.cos(t * (1 + 0.03 * c) + 0.2 * d)
    return swing + 0.05 * z[:, 4:16] @ np.sin(np.outer(np.arange(1, 13), t) / 5)


def _least_angle_histories() -> list[dict[str, Any]]:
    """Outputs as a study has them: time histories."""
    return _least_angle("1,000 outputs of a time history", _histories, 5)


def _least_angle_unrelated() -> list[dict[str, Any]]:
    """The hardest case, beyond the goal: outputs with 15 terms each of their own, 10 % noise."""
    rng = np.random.default_rng(5)
    basis = ProductBasis.standard_normal(26, 2)
    truth = np.zeros((basis.n_terms, 60))
    for column in truth.T:
        column[rng.choice(basis.n_terms, 15, replace=False)] = rng.normal(size=15)
    noise = np.random.default_rng(6)

    def outputs(z: np.ndarray) -> np.ndarray:
        values = basis.evaluate(z).T @ truth
        return values + 0.1 * values.std(axis=0) * noise.normal(size=values.shape)

    found = _least_angle("60 unrelated noisy outputs", outputs, 4)
    return [stated(found[0]["name"], found[0]["value"], found[0]["unit"]), *found[1:]]


def _least_angle(title: str, outputs_at: Any, looped: int) -> list[dict[str, Any]]:
    rng = np.random.default_rng(4)
    basis = ProductBasis.standard_normal(26, 2)
    nodes, fresh = rng.normal(size=(200, 26)), rng.normal(size=(2000, 26))
    matrix, held = basis.evaluate(nodes), basis.evaluate(fresh)
    outputs, truth = outputs_at(nodes), outputs_at(fresh)
    start = time.perf_counter()
    fit = least_angle(matrix, outputs)
    mine = time.perf_counter() - start
    # the loop is timed on some of the outputs: they all cost the same
    some = np.linspace(0, outputs.shape[1] - 1, looped).astype(int)
    errors = []
    start = time.perf_counter()
    for k in some:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ConvergenceWarning)
            model = LassoLarsCV(cv=5).fit(matrix[1:].T, outputs[:, k])
        errors.append(model.predict(held[1:].T) - truth[:, k])
    theirs = (time.perf_counter() - start) * outputs.shape[1] / looped
    ours = held.T @ fit.coefficients[:, some] - truth[:, some]
    ratio = float(np.sqrt(np.mean(ours**2) / np.mean(np.square(errors))))
    name = f"least-angle regression, 378 terms x 200 runs x {title}"
    return [
        at_least(f"{name}, against a loop of LassoLarsCV", theirs / mine, 30),
        at_most(f"{name}, held-out error", ratio, 1.0, "of LassoLarsCV's"),
        stated(f"{name}, peak memory", peak_megabytes(lambda: least_angle(matrix, outputs)), "MB"),
    ]


def _evaluation() -> list[dict[str, Any]]:
    rng = np.random.default_rng(7)
    basis = ProductBasis.standard_normal(14, 2)
    expansion = Expansion(basis, rng.normal(size=(basis.n_terms, 6)))
    nodes = rng.normal(size=(100_000, 14))
    matrix = np.ascontiguousarray(basis.evaluate(nodes).T)
    mine, product = times(
        lambda: expansion.evaluate(nodes), lambda: matrix @ expansion.coefficients, repeats=15
    )
    name = "evaluation, d = 14, degree 2, 1e5 samples x 6 outputs"
    return [
        at_most(f"{name}, against the bare product", mine / product, 3, "times its time"),
        stated(f"{name}, peak memory", peak_megabytes(lambda: expansion.evaluate(nodes)), "MB"),
    ]


def _growth() -> list[dict[str, Any]]:
    rng = np.random.default_rng(8)
    basis = ProductBasis.standard_normal(10, 3)
    matrix = basis.evaluate(rng.normal(size=(600, 10)))
    outputs = rng.normal(size=(600, 16_000))
    nodes = rng.normal(size=(160_000, 10))
    coefficients = rng.normal(size=(basis.n_terms, 6))
    expansion = Expansion(basis, coefficients)

    def by_terms(degree: int) -> Any:
        small = ProductBasis.standard_normal(10, degree)
        return lambda: Expansion(small, coefficients[: small.n_terms]).evaluate(nodes[:20_000])

    terms = {2: 66, 3: 286}
    seconds = times(*(by_terms(degree) for degree in terms))
    by_term = np.log(seconds[1] / seconds[0]) / np.log(286 / 66)
    return [
        at_most(
            "least squares: growth with outputs, 2,000 to 16,000",
            growth(
                [2000, 4000, 8000, 16_000],
                lambda n: lambda: least_squares(matrix, outputs[:, :n]),
                repeats=3,
            ),
            1.1,
            "exponent",
        ),
        at_most(
            "evaluation: growth with samples, 20,000 to 160,000",
            growth(
                [20_000, 40_000, 80_000, 160_000],
                lambda n: lambda: expansion.evaluate(nodes[:n]),
                repeats=3,
            ),
            1.1,
            "exponent",
        ),
        stated("evaluation: growth with terms, 66 to 286", float(by_term), "exponent"),
    ]
