"""Which degree and norm exponent: the truncation whose fit has the least corrected error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import FitError
from nipc.expansion.basis import ProductBasis
from nipc.expansion.fits.fit import Fit, Fitter
from nipc.expansion.indices import hyperbolic
from nipc.expansion.recurrence import Recurrence, recurrence_of

_PATIENCE = 2  # further degrees tried after one that does not better the error
_MOST_TERMS = 3_000  # of a truncation that is tried


@dataclass(frozen=True)
class Choice:
    """The chosen basis and fit; score: root mean square over outputs of the corrected error;
    tried: (degree, norm, terms, score) of every truncation looked at."""

    basis: ProductBasis
    fit: Fit
    degree: int
    norm: float
    score: float
    tried: tuple[tuple[int, float, int, float], ...]


def choose_truncation(
    distributions: Any,
    nodes: FloatArray,
    outputs: FloatArray,
    fitter: Fitter,
    degrees: Sequence[int] = tuple(range(1, 15)),
    norms: Sequence[float] = (0.5, 0.75, 1.0),
    interactions: int | None = None,
) -> Choice:
    """Fit outputs at nodes (n, variables) with each truncation and keep the best.

    distributions: chaospy distributions or Recurrence objects, one per variable. Degrees are tried
    upwards for each norm, until the error has not fallen twice running. FitError, that of the
    smallest truncation, when none can be fitted.
    """
    families = _families(distributions, max(degrees))
    best: Choice | None = None
    tried: list[tuple[int, float, int, float]] = []
    refusal: FitError | None = None
    for norm in norms:
        lowest, waited = np.inf, 0
        for degree in sorted(degrees):
            indices = hyperbolic(len(families), degree, norm, interactions=interactions)
            if indices.shape[0] > _MOST_TERMS:
                break
            basis = ProductBasis(families, indices)
            try:
                fit = fitter(basis.evaluate(nodes), outputs)
            except FitError as error:
                refusal = refusal or error
                break
            score = float(np.sqrt(np.mean(fit.corrected_error**2)))
            tried.append((degree, norm, basis.n_terms, score))
            if best is None or score < best.score:
                best = Choice(basis, fit, degree, norm, score, ())
            waited = 0 if score < lowest else waited + 1
            lowest = min(lowest, score)
            if waited >= _PATIENCE:
                break
    if best is None:
        raise refusal or FitError("no truncation small enough was given")
    return Choice(best.basis, best.fit, best.degree, best.norm, best.score, tuple(tried))


def _families(distributions: Any, degree: int) -> list[Recurrence]:
    return [
        part if isinstance(part, Recurrence) else recurrence_of(part, degree)
        for part in distributions
    ]
