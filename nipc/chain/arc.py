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
    (terms, m d). `reach` is the largest Christoffel value among the design's runs. Members whose
    leverage passes `direct_reach` are worth a direct run.
    """

    first: int
    last: int
    start: float
    times: FloatArray
    noise: NoiseModel
    basis: TensorBasis
    coefficients: FloatArray
    reach: float
    degree: int
    components: int
    direct_reach: float = float("inf")

    def __call__(self, germ: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Chart states (n, m, d) of germ rows (n, c + K), and the rows' leverage (n,).

        Leverage is the Christoffel function over its largest value in the design. Where it passes
        `REACH` the polynomial would be extrapolated: the parts beyond degree one are scaled down
        there, so that a far member moves by the linear map and nothing explodes.
        """
        matrix = self.basis.evaluate(germ)
        leverage = np.einsum("tn,tn->n", matrix, matrix) / self.reach
        far = leverage > REACH
        if np.any(far):
            nonlinear = self.basis.indices.sum(axis=1) > 1
            matrix[np.ix_(nonlinear, far)] *= REACH / leverage[far]
        values = (matrix.T @ self.coefficients).reshape(germ.shape[0], -1, self.components)
        return values, leverage

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


REACH = 4.0
