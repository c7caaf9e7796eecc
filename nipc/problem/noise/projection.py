"""Z_low = P Z_rich: the coefficients that a shorter basis would see of a richer path."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise.basis import NoiseBasis
from nipc.problem.noise.forcing import NoiseModel


def projection(low: NoiseBasis, rich: NoiseBasis) -> FloatArray:
    """(low.terms, rich.terms) inner products of two bases on one arc.

    Where the richer basis holds the shorter one's span, Z_low is again N(0, I).
    """
    count = 32 + 4 * (low.terms + rich.terms)
    nodes, weights = np.polynomial.legendre.leggauss(count)
    u = 0.5 * (nodes + 1.0)
    return (low.values(u) * (0.5 * weights)) @ rich.values(u).T


def restrict(low: NoiseModel, rich: NoiseModel, coefficients: FloatArray) -> FloatArray:
    """Columns (n, low.size) that `low` sees of paths with rich coefficients (n, rich.size)."""
    result = np.empty((coefficients.shape[0], low.size))
    for j, source in enumerate(low.sources):
        inner, outer = low.columns(j), rich.columns(j)
        carried = source.carried
        result[:, inner.start : inner.start + carried] = coefficients[
            :, outer.start : outer.start + carried
        ]
        matrix = projection(low.bases[j], rich.bases[j])
        result[:, inner.start + carried : inner.stop] = (
            coefficients[:, outer.start + carried : outer.stop] @ matrix.T
        )
    return result
