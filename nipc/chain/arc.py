"""y(t) = sum_k c_k(t) psi_k(y_a, u_a, p, Z): the expansion of one arc in its chart.

The correlated part of the germ (the state in the chart at the arc's start, carried Gauss-Markov
values, parameters) has polynomials orthonormal on the ensemble; the arc's fresh noise has Hermite
polynomials. A product of both is kept when its state degree plus the weighted noise degrees stay
within the arc's degree, or when it is linear. A noise variable of relative size s (its linear
effect over the state's spread) weighs 1 + log10(1/s): where a state variable's square matters, one
ten times weaker matters only linearly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.endings import Endings
from nipc.expansion import ProductBasis, SampledBasis, TensorBasis, hermite, weighted
from nipc.problem.noise import NoiseModel


def noise_weights(sizes: FloatArray) -> FloatArray:
    """Weights of noise variables of relative sizes (K,), in quarters so that sets change seldom."""
    clipped = np.clip(sizes, 1e-8, 1.0)
    return np.asarray(np.floor(4.0 * (1.0 - np.log10(clipped))) / 4.0)


@dataclass(frozen=True, eq=False)
class ArcBasis:
    """The basis of an arc up to its highest degree, from which lower degrees are taken.

    cost (terms,) is the degree at which each term enters.
    """

    full: TensorBasis
    cost: FloatArray

    @classmethod
    def of(cls, pool: FloatArray, sizes: FloatArray, degree: int, noise_degree: int) -> ArcBasis:
        """From the pool's correlated values (n, c) and the relative sizes (K,) of the noise."""
        left = SampledBasis.from_samples(pool, degree)
        # a linear term is always in: no weight beyond the degree; and noise^k only up to its own
        weights = np.maximum(noise_weights(sizes), degree / (noise_degree + 0.5))
        capped = np.minimum(weights, float(degree))
        indices = weighted(sizes.size, degree, capped)
        right = ProductBasis([hermite(degree)] * sizes.size, indices)
        order = indices.sum(axis=1)
        right_cost = np.where(order <= 1, np.minimum(indices @ weights, 1e9), indices @ weights)
        cost: FloatArray = np.asarray(left.degrees[:, None] + right_cost, dtype=float)
        linear = (left.degrees[:, None] + order) <= 1
        cost = np.where(linear, left.degrees[:, None] + order, cost)
        pairs = np.argwhere(cost <= degree + 1e-9)
        rank = np.asarray(cost[pairs[:, 0], pairs[:, 1]], dtype=float)
        ordering = np.lexsort([pairs[:, 1], pairs[:, 0], rank])
        return cls(TensorBasis(left, right, pairs[ordering]), rank[ordering])

    def up_to(self, degree: int) -> TensorBasis:
        """The leading terms that a degree holds."""
        return self.full.take(np.flatnonzero(self.cost <= degree + 1e-9))


@dataclass(frozen=True, eq=False)
class ArcMap:
    """Chart states at an arc's times as polynomials of what goes into the arc.

    Ticks first ... last; times (m,) after the arc's start, the last being its end; coefficients
    (terms, m d). low, high (m, d) are what its runs reached, and twice that range beyond; `error`
    is held out, at the arc's end, over the spread. So many members of the ensemble as `direct_runs`
    may be run directly, those farthest outside; `endings` tells which of them end in the arc.
    """

    first: int
    last: int
    start: float
    times: FloatArray
    noise: NoiseModel
    basis: TensorBasis
    coefficients: FloatArray
    low: FloatArray
    high: FloatArray
    degree: int
    components: int
    error: float = 0.0
    direct_runs: float = 0.0
    endings: Endings | None = None

    def __call__(self, germ: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Chart states (n, m, d) of germ rows (n, c + K), and how far outside the rows are (n,).

        Far is what passes one. It is an error that a row must be feared to have at the arc's end,
        over `WRONG` times the spread: the larger of the terms of the highest degree p there, which
        are large where the expansion has not converged, and of the held-out error carried outwards.
        That grows like |x|^(p + 1), and the Christoffel function, whose mean is the number of
        terms, like |x|^(2 p). Far rows have the parts beyond degree one scaled down, so that they
        move by the linear map; and none goes past `low` and `high`: nothing explodes.
        """
        matrix = self.basis.evaluate(germ)
        order = self.basis.indices.sum(axis=1)
        degree = max(int(order.max()), 1)
        christoffel = np.einsum("tn,tn->n", matrix, matrix) / order.size
        outside = self.error * christoffel ** (0.5 * (degree + 1) / degree) / WRONG
        if degree > 1:
            top = order == degree
            last = self.coefficients.reshape(order.size, self.times.size, -1)[:, -1]
            spread = np.sqrt(np.sum(last[1:] ** 2, axis=0))
            steep = np.abs(matrix[top].T @ last[top])
            with np.errstate(invalid="ignore", divide="ignore"):
                steep = np.where(spread > 0, steep / (WRONG * spread), 0.0)
            outside = np.maximum(outside, steep.max(axis=1))
        far = outside > 1.0
        if np.any(far):
            matrix[np.ix_(order > 1, far)] /= outside[far]
        values = (matrix.T @ self.coefficients).reshape(germ.shape[0], -1, self.components)
        beyond = np.any((values < self.low) | (values > self.high), axis=(1, 2))
        if np.any(beyond):
            values[beyond] = np.clip(values[beyond], self.low, self.high)
            outside[beyond] = np.maximum(outside[beyond], 1.0 + 1e-9)
        return values, outside

    def sizes(self, spread: FloatArray) -> FloatArray:
        """(K,) largest linear effect of each noise variable over the spread (d,) at the end."""
        with np.errstate(invalid="ignore", divide="ignore"):
            effect = np.abs(self.linear_response) / spread
        return np.asarray(np.max(np.where(spread > 0, effect, 0.0), axis=1, initial=0.0))

    @property
    def linear_response(self) -> FloatArray:
        """(K, d) linear effect of each white coefficient at the arc's end."""
        indices = self.basis.indices
        count = sum(family.terms for family in self.noise.bases)
        result = np.zeros((count, self.components))
        last = self.coefficients.reshape(indices.shape[0], self.times.size, -1)[:, -1]
        for term in np.flatnonzero(indices.sum(axis=1) == 1):
            variable = int(indices[term].argmax()) - (indices.shape[1] - count)
            if variable >= 0:
                result[variable] = last[term]
        return result


WRONG = 0.3
"""An error over the spread with which a member is better run directly."""
