"""As few runs as the tolerance asks for: start small, add runs and degrees, and say why it ended.

The design is extended, never drawn anew; after each batch the truncation is chosen afresh, so that
degrees rise as the runs allow. The loop ends on an error that holds with the selection repeated in
every fold, since the error by which terms were selected flatters itself.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import FitError, InputError
from nipc.expansion.basis import ProductBasis
from nipc.expansion.choice import choose_truncation
from nipc.expansion.designs.cube import CubeDesign, quantiles
from nipc.expansion.fits.cross_validation import cross_validated
from nipc.expansion.fits.fit import Fit, Fitter, finite_rows
from nipc.expansion.fits.least_angle import least_angle

Run = Callable[[FloatArray], FloatArray]  # germ nodes (n, variables) -> outputs (n, …), NaN: failed


@dataclass(frozen=True)
class Step:
    """One look: runs so far, the chosen degree, norm and terms, and the relative error found."""

    n_runs: int
    degree: int
    norm: float
    n_terms: int
    error: float


@dataclass(frozen=True)
class Enriched:
    """basis, fit: the last ones; nodes, outputs: all runs, failed ones too;
    error: the largest over outputs of cross-validated error over spread;
    reached: whether it is within the tolerance; reason: a sentence saying why it ended."""

    basis: ProductBasis
    fit: Fit
    nodes: FloatArray
    outputs: FloatArray
    error: float
    reached: bool
    reason: str
    steps: tuple[Step, ...]


def enrich(
    run: Run,
    distributions: Sequence[Any],
    design: CubeDesign,
    tolerance: float,
    budget: int,
    batch: int = 1,
    *,
    degrees: Sequence[int] = tuple(range(1, 13)),
    norms: Sequence[float] = (0.5, 0.75, 1.0),
    fitter: Fitter = least_angle,
) -> Enriched:
    """Expand what `run` computes until its relative error is within `tolerance`.

    distributions: chaospy's, one per germ variable; budget: the most runs; batch: runs that fill
    the workers once — numbers of runs are multiples of it as far as the budget allows. FitError
    when too few runs succeed for any fit.
    """
    if not tolerance > 0.0 or budget < 4 or batch < 1:
        raise InputError(
            f"tolerance {tolerance}, budget {budget}, batch {batch}: all positive, "
            "and at least four runs"
        )
    n_variables = len(distributions)
    rng = np.random.default_rng([design.seed, n_variables])
    points = np.empty((0, n_variables))
    nodes = np.empty((0, n_variables))
    outputs: FloatArray | None = None
    steps: list[Step] = []
    wanted = _whole_batches(max(2 * n_variables + 2, 10), batch, budget)
    while True:
        fresh = design.extend(points, wanted - len(points))
        points = np.vstack([points, fresh])
        fresh_nodes = quantiles(fresh, distributions)
        fresh_outputs = np.asarray(run(fresh_nodes), dtype=np.float64)
        nodes = np.vstack([nodes, fresh_nodes])
        outputs = fresh_outputs if outputs is None else np.concatenate([outputs, fresh_outputs])
        fine = finite_rows(outputs)
        usable = outputs[fine].reshape(int(fine.sum()), -1)
        try:
            choice = choose_truncation(distributions, nodes[fine], usable, fitter, degrees, norms)
            error = _error(fitter, choice.basis, nodes[fine], usable, choice.fit, rng)
        except FitError:
            if wanted >= budget:
                raise
        else:
            steps.append(Step(wanted, choice.degree, choice.norm, choice.basis.n_terms, error))
            if error <= tolerance or wanted >= budget:
                break
        wanted = _whole_batches(max(wanted + batch, wanted + wanted // 2), batch, budget)
    reached = error <= tolerance
    reason = (
        f"after {wanted} runs the error estimate {error:.2g} is within "
        f"the tolerance {tolerance:.2g}"
        if reached
        else f"the budget of {budget} runs is spent with an error estimate of {error:.2g}, "
        f"above the tolerance {tolerance:.2g}"
    )
    failed = int(np.sum(~fine))
    if failed:
        reason += f"; {failed} failed runs were left out"
    return Enriched(choice.basis, choice.fit, nodes, outputs, error, reached, reason, tuple(steps))


def _error(
    fitter: Fitter,
    basis: ProductBasis,
    nodes: FloatArray,
    outputs: FloatArray,
    fit: Fit,
    rng: np.random.Generator,
) -> float:
    """Largest cross-validated error over spread; constant outputs count for nothing."""
    errors = cross_validated(fitter, basis.evaluate(nodes), outputs, rng)
    alive = fit.spread > 0.0
    return float(np.max(errors[alive] / fit.spread[alive], initial=0.0))


def _whole_batches(n_runs: int, batch: int, budget: int) -> int:
    return min(-(-n_runs // batch) * batch, budget)
