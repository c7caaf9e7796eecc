"""One arc: q(t) expanded in the whole germ, from a design, with a held-out check."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.chain.check import HeldOut
from nipc.chain.plan import noise_terms
from nipc.errors import FitError, InputError
from nipc.expansion import (
    Expansion,
    Fit,
    LatinHypercube,
    ProductBasis,
    SobolDesign,
    enrich,
    hyperbolic,
    least_angle,
    least_squares,
    near_optimal_subset,
    quantiles,
    sparse_grid,
)
from nipc.problem.germ import Germ
from nipc.problem.noise.projection import restrict
from nipc.problem.quantities import QuantitySet
from nipc.problem.study import Study
from nipc.runs.engine import Engine
from nipc.runs.outcomes import Outcomes
from nipc.runs.propagator import Batch

AUTO_RUNS = 600
AUTO_BATCH = 8  # not the number of workers, on which no number may depend


def generator(study: Study, purpose: str) -> np.random.Generator:
    """A random generator of the study's seed, of its own for each purpose."""
    entropy = [study.seed, *purpose.encode()]
    return np.random.default_rng(np.random.SeedSequence(entropy))


@dataclass(frozen=True, eq=False)
class Design:
    """Germ nodes (n, size) to run, weights for the fit, and the basis they are meant for."""

    nodes: FloatArray
    weights: FloatArray
    basis: ProductBasis
    words: str


@dataclass(frozen=True, eq=False)
class SingleArc:
    """A solved arc.

    expansion has outputs (T, Q); `relative_error` (T, Q) is the leave-one-out error over the
    spread.
    """

    study: Study
    germ: Germ
    times: FloatArray
    expansion: Expansion
    relative_error: FloatArray
    check: HeldOut
    design: Design
    outcomes: tuple[Outcomes, ...]
    notes: tuple[str, ...] = field(default=())

    def quantities(self, nodes: FloatArray) -> FloatArray:
        """Quantities (n, T, Q) at germ nodes."""
        return self.expansion.evaluate(nodes)


def germ_of(study: Study, richness: int = 1) -> Germ:
    """The germ over the whole horizon."""
    terms = noise_terms(study, study.clock.length)
    terms = tuple(richness * n for n in terms)
    return Germ.of(study, terms, study.clock.start, study.clock.end)


def basis_of(study: Study, germ: Germ, degree: int) -> ProductBasis:
    """The truncated product basis of the study's settings."""
    settings = study.expansion
    indices = hyperbolic(germ.size, degree, settings.norm, interactions=settings.interactions)
    return ProductBasis.from_distributions(germ.distributions(), indices)


def design_of(study: Study, germ: Germ) -> Design:
    """Choose the nodes; InputError when they cannot carry the expansion or pass the budget."""
    settings = study.design
    rng = generator(study, "design")
    degree = settings_degree(study)
    basis = basis_of(study, germ, degree)
    count = settings.runs or math.ceil(settings.oversampling * basis.n_terms)
    nodes: FloatArray
    weights: FloatArray
    if settings.kind == "sparse-grid":
        grid = sparse_grid(germ.distributions(), settings.level)
        nodes, weights = grid.nodes, np.ones(grid.nodes.shape[0])
        words = f"sparse grid of level {settings.level}"
    elif settings.kind == "near-optimal":
        candidates = germ.sample(rng, max(4000, 10 * count))
        subset = near_optimal_subset(basis, candidates, count, rng)
        nodes, weights = candidates[subset.rows], subset.weights
        words = "near D-optimal subset"
    else:
        family = SobolDesign if settings.kind == "sobol" else LatinHypercube
        points = family(germ.size, study.seed).start(count)
        nodes = quantiles(points, germ.distributions())
        weights = np.ones(count)
        words = {"sobol": "Sobol' points", "latin-hypercube": "Latin hypercube"}[settings.kind]
    nodes, first = np.unique(nodes, axis=0, return_index=True)
    order = np.argsort(first)
    nodes, weights = nodes[order], weights[np.sort(first)]
    _refuse(study, basis, degree, nodes.shape[0])
    return Design(nodes, weights, basis, words)


def settings_degree(study: Study) -> int:
    """The degree that the study fixes."""
    degree = study.expansion.degree
    if degree == "auto":
        raise InputError("expansion.degree is chosen while the runs are made; it is not known yet")
    return degree


def _refuse(study: Study, basis: ProductBasis, degree: int, runs: int) -> None:
    if study.expansion.fit == "least-squares" and runs <= basis.n_terms:
        raise InputError(
            f"{runs} runs cannot carry the {basis.n_terms} terms of degree {degree} in "
            f"{basis.n_variables} germ variables: lower expansion.degree or expansion.norm, give "
            'fewer noise terms, ask for more runs, or use expansion.fit = "least-angle"'
        )
    total = runs + study.check.runs
    if study.budget is not None and total > study.budget:
        raise InputError(
            f"the design takes {runs} runs and the check {study.check.runs}, together {total}; the "
            f"budget is {study.budget:g}: lower the degree or the number of noise terms, or raise "
            "the budget"
        )


def solve(study: Study, engine: Engine, quantities: QuantitySet) -> SingleArc:
    """Run the design, fit it, and check it against held-out direct runs."""
    germ = germ_of(study)
    times, rows = run_times(study)
    made: list[Outcomes] = []

    def values_at(nodes: FloatArray, label: str) -> FloatArray:
        made.append(engine.run(_batch(germ, nodes, times), label))
        return _values(germ, nodes, times, rows, made[-1], quantities)

    if study.expansion.degree == "auto":
        design, expansion, error, notes = _enriched(study, germ, values_at)
    else:
        design = design_of(study, germ)
        expansion, error, notes = _fit(study, design, values_at(design.nodes, "design"))

    rich = germ_of(study, study.check.richness)
    fresh = rich.sample(generator(study, "check"), study.check.runs)
    checked = engine.run(_batch(rich, fresh, times), "check")
    direct = _values(rich, fresh, times, rows, checked, quantities)
    seen = np.hstack(
        [
            fresh[:, : germ.first_noise],
            restrict(germ.noise, rich.noise, fresh[:, rich.first_noise :]),
        ]
    )
    check = HeldOut(times[rows], direct, expansion.evaluate(seen), expansion.std)
    return SingleArc(
        study, germ, times[rows], expansion, error, check, design, (*made, checked), notes
    )


def _enriched(
    study: Study, germ: Germ, values_at: Callable[[FloatArray, str], FloatArray]
) -> tuple[Design, Expansion, FloatArray, tuple[str, ...]]:
    """Start small; add runs and degrees until the error estimate keeps the tolerance."""
    family = LatinHypercube if study.design.kind == "latin-hypercube" else SobolDesign
    shape: list[tuple[int, ...]] = []

    def run(nodes: FloatArray) -> FloatArray:
        values = values_at(nodes, "design")
        shape.append(values.shape[1:])
        return values

    found = enrich(
        run,
        germ.distributions(),
        family(germ.size, study.seed),
        study.tolerance,
        auto_budget(study),
        AUTO_BATCH,
        fitter=least_angle if study.expansion.fit == "least-angle" else _sound_least_squares,
    )
    expansion = found.fit.expansion(found.basis, shape[0])
    error = found.fit.relative_error.reshape(shape[0])
    design = Design(found.nodes, np.ones(found.nodes.shape[0]), found.basis, "enriched")
    sentence = f"The design was enriched: {found.reason}."
    return design, expansion, error, (sentence,)


def _sound_least_squares(matrix: FloatArray, outputs: FloatArray) -> Fit:
    """Least squares that is refused below a sound number of runs a term."""
    if matrix.shape[1] < 1.2 * matrix.shape[0]:
        raise FitError(f"{matrix.shape[1]} runs are too few for {matrix.shape[0]} terms")
    return least_squares(matrix, outputs)


def auto_budget(study: Study) -> int:
    """The most design runs of a study whose degree is chosen for it."""
    return int(min(study.budget or AUTO_RUNS, AUTO_RUNS) - study.check.runs)


def run_times(study: Study) -> tuple[FloatArray, FloatArray | slice]:
    """Times of a run, the clock's start first, and which of them are outputs."""
    outputs = study.clock.times
    if outputs[0] > study.clock.start:
        return np.concatenate([[study.clock.start], outputs]), slice(1, None)
    return outputs, slice(None)


def _batch(germ: Germ, nodes: FloatArray, times: FloatArray) -> Batch:
    return Batch(germ.states(nodes), times, germ.forcing(nodes), germ.parameters(nodes))


def _values(
    germ: Germ,
    nodes: FloatArray,
    times: FloatArray,
    rows: Any,
    outcomes: Outcomes,
    quantities: QuantitySet,
) -> FloatArray:
    """Quantities (n, T, Q); NaN in failed runs and after a physical ending."""
    states = outcomes.states[:, rows]
    with np.errstate(invalid="ignore", divide="ignore"):
        return quantities(times[rows], states, germ.parameters(nodes))


def _fit(
    study: Study, design: Design, values: FloatArray
) -> tuple[Expansion, FloatArray, tuple[str, ...]]:
    """Fit every output on the runs that have it: outputs are grouped by which runs do."""
    n, shape = values.shape[0], values.shape[1:]
    flat = values.reshape(n, -1)
    known = np.isfinite(flat)
    notes: list[str] = []
    if not known.all():
        failed = int(n - known.any(axis=1).sum())
        ended = int((known.any(axis=1) & ~known.all(axis=1)).sum())
        if failed:
            notes.append(f"{failed} of {n} design runs failed; the fit goes on without them.")
        if ended:
            notes.append(
                f"{ended} of {n} design runs ended early or have undefined quantities; from then "
                "on the fit rests on the others, so that it speaks of motion that goes on."
            )
    patterns, group = np.unique(known.T, axis=0, return_inverse=True)
    basis = design.basis
    coefficients = np.zeros((basis.n_terms, flat.shape[1]))
    error, loo = np.full(flat.shape[1], np.nan), np.full(flat.shape[1], np.nan)
    unfit: list[int] = []
    for g, pattern in enumerate(patterns):
        columns = np.flatnonzero(group.ravel() == g)
        try:
            fit, part = _fit_group(study, design, pattern, flat[np.ix_(pattern, columns)])
        except FitError:
            # once most runs have ended, nothing but that can be said
            unfit += list(columns // shape[-1])
            coefficients[:, columns] = np.nan
            if not study.clock.times[min(unfit)] > study.clock.times[0] or not _ended(known):
                raise
            continue
        coefficients[np.ix_(part, columns)] = fit.coefficients
        error[columns], loo[columns] = fit.relative_error, fit.loo
    if unfit:
        since = float(study.clock.times[min(unfit)])
        notes.append(
            f"From t = {since:g} {study.clock.unit} on too few runs of the design go on to be"
            " expanded: of then it is only told how many have ended."
        )
    expansion = Expansion(basis, coefficients.reshape(-1, *shape), loo.reshape(shape))
    return expansion, error.reshape(shape), tuple(notes)


def _ended(known: BoolArray) -> bool:
    """Whether a run has its first outputs and not its last."""
    return bool(np.any(known[:, 0] & ~known[:, -1]))


def _fit_group(
    study: Study, design: Design, pattern: BoolArray, outputs: FloatArray
) -> tuple[Any, IntArray]:
    matrix = design.basis.evaluate(design.nodes[pattern])
    everything = np.arange(design.basis.n_terms)
    if study.expansion.fit == "least-angle":
        return least_angle(matrix, outputs), everything
    weights = design.weights[pattern]
    if pattern.sum() <= matrix.shape[0]:
        raise FitError(
            f"only {int(pattern.sum())} of {pattern.size} design runs can be used, and the "
            f"expansion has {matrix.shape[0]} terms: see why the runs failed with `nipc status`"
        )
    return least_squares(matrix, outputs, weights), everything
