"""Accuracy of expansions from few runs, against closed forms, published values and fresh points."""

from __future__ import annotations

from typing import Any

import numpy as np
import reference_functions as known
from measure import at_least, at_most
from sklearn.datasets import load_diabetes

from nipc.expansion import (
    ProductBasis,
    SobolDesign,
    choose_truncation,
    entry_order,
    hermite,
    least_angle,
    legendre,
    quantiles,
)

SEED = 11


def rows() -> list[dict[str, Any]]:
    return [
        *_ishigami(100, 1e-4),
        *_ishigami(200, 1e-6),
        *_g_function(),
        *_hundred_variables(),
        *_orbit("regular", known.REGULAR),
        *_orbit("chaotic", known.CHAOTIC),
        *_diabetes(),
    ]


def _ishigami(n_runs: int, goal: float) -> list[dict[str, Any]]:
    families = [legendre(16, -np.pi, np.pi)] * 3
    nodes = np.pi * (2 * SobolDesign(3, SEED).start(n_runs) - 1)
    choice = choose_truncation(
        families, nodes, known.ishigami(nodes), least_angle, degrees=range(1, 17)
    )
    expansion = choice.fit.expansion(choice.basis)
    fresh = np.pi * (2 * np.random.default_rng(SEED).random((20_000, 3)) - 1)
    truth = known.ishigami(fresh)
    first, total, _ = known.ishigami_indices()
    error = np.mean((expansion.evaluate(fresh)[:, 0] - truth) ** 2) / np.var(truth)
    gap = np.abs(np.stack([expansion.first()[:, 0] - first, expansion.total()[:, 0] - total]))
    name = f"Ishigami function, {n_runs} runs"
    return [
        at_most(f"{name}, mean-square error over variance", float(error), goal),
        at_most(f"{name}, worst index", float(gap.max()), 0.002),
    ]


def _g_function() -> list[dict[str, Any]]:
    nodes = SobolDesign(8, SEED).start(400)
    choice = choose_truncation(
        [legendre(20, 0, 1)] * 8,
        nodes,
        known.g_function(nodes),
        least_angle,
        degrees=range(1, 21),
        norms=(0.4, 0.5, 0.6),
    )
    expansion = choice.fit.expansion(choice.basis)
    first, total = known.g_indices()
    gap = np.abs(np.stack([expansion.first()[:, 0] - first, expansion.total()[:, 0] - total]))
    return [at_most("Sobol's g-function, 400 runs, worst index", float(gap.max()), 0.02)]


def _hundred_variables() -> list[dict[str, Any]]:
    basis = ProductBasis.standard_normal(100, 2)
    nodes = quantiles(SobolDesign(100, SEED).start(300))
    fit = least_angle(basis.evaluate(nodes), known.hundred(nodes))
    expansion = fit.expansion(basis)
    largest = 1 + np.argsort(-np.abs(expansion.coefficients[1:, 0]))[: len(known.HUNDRED_TERMS)]
    found = {tuple(np.repeat(np.arange(100), basis.indices[t]).tolist()) for t in largest}
    gap = abs(float(expansion.variance[0]) / known.HUNDRED_VARIANCE - 1)
    name = "100 variables, 7 active of 5,151 terms, 300 runs"
    share = len(found & set(known.HUNDRED_TERMS)) / len(known.HUNDRED_TERMS)
    return [
        at_least(f"{name}, share of the active terms among the largest", share, 1.0, ""),
        at_most(f"{name}, relative error of the variance", gap, 0.01),
    ]


def _orbit(title: str, start: tuple[float, ...]) -> list[dict[str, Any]]:
    n_modes = 7  # horizon · frequency / π + 3
    nodes = quantiles(SobolDesign(2 * n_modes, SEED).start(200))
    choice = choose_truncation(
        [hermite(4)] * (2 * n_modes),
        nodes,
        known.cubic_orbit(nodes, start),
        least_angle,
        degrees=range(1, 5),
    )
    fresh = np.random.default_rng(SEED).normal(size=(2000, 2 * n_modes))
    truth = known.cubic_orbit(fresh, start)
    error = choice.fit.expansion(choice.basis).evaluate(fresh) - truth
    worst = float(np.max(np.sqrt(np.mean(error**2, axis=0)) / truth.std(axis=0)))
    name = f"{title} orbit, cubic potential, T = 10, noise 2e-3 and 1e-3, 200 runs"
    return [at_most(f"{name}, held-out error over spread", worst, 0.01)]


def _diabetes() -> list[dict[str, Any]]:
    """Order of entry in Efron, Hastie, Johnstone & Tibshirani (2004), section 1, from memory:
    3, 9, 4, 7, 2, 10, 5, 8, 6, 1 (age, sex, bmi, map, tc, ldl, hdl, tch, ltg, glu)."""
    data = load_diabetes()
    matrix = np.vstack([np.ones(len(data.target)), data.data.T])
    order = entry_order(matrix, data.target, 10)
    published = [3, 9, 4, 7, 2, 10, 5, 8, 6, 1]
    same = float(np.mean(order == published))
    return [at_least("diabetes data, variables entering in the published order", same, 1.0, "")]
