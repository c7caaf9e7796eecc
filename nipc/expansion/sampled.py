"""Orthonormal polynomials of correlated variables that are known only by samples.

    y = W (x − m),   Ψ = R^{−T} Φ(y),   Φ(samples)ᵀ / √n = Q R

x is whitened by a singular value decomposition; Φ are products of polynomials orthonormal in each
whitened direction, nearly orthonormal already; the triangular factor makes them so on the samples
and keeps them nested: the terms up to a degree never involve those of higher degrees. Directions
and terms that the samples do not determine are dropped, never divided by.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.errors import FitError, InputError
from nipc.expansion.basis import Basis, ProductBasis
from nipc.expansion.indices import total_degree
from nipc.expansion.recurrence import recurrence_of_points

_DEPENDENT = 1e-5  # what is left of a term, over its length, below which the samples do not tell it

Truncation = Callable[[int, int], IntArray]  # (directions, degree) -> multi-indices


@dataclass(frozen=True)
class Whitening:
    """y = (x − centre) @ matrix: uncorrelated, of unit variance.

    centre (variables,); matrix (variables, directions); directions of little variance are left out.
    """

    centre: FloatArray
    matrix: FloatArray

    @classmethod
    def of(cls, samples: FloatArray, tolerance: float = 1e-8) -> Whitening:
        """Whitening of samples (n, variables).

        A variable counts as constant when its deviation is within rounding of its size; a
        direction is dropped when its deviation is below `tolerance` of the largest, all variables
        scaled to unit variance.
        """
        samples = np.asarray(samples, dtype=np.float64)
        if samples.ndim != 2 or samples.shape[0] < 2:
            raise InputError(f"samples of shape {samples.shape}: at least two rows are needed")
        if not np.all(np.isfinite(samples)):
            raise FitError("samples that are not finite cannot be whitened; leave them out")
        centre = samples.mean(axis=0)
        shifted = samples - centre
        deviation = np.sqrt(np.mean(shifted * shifted, axis=0))
        rounding = 64.0 * np.finfo(np.float64).eps * np.max(np.abs(samples), axis=0)
        alive = np.flatnonzero(deviation > rounding)
        matrix = np.zeros((samples.shape[1], 0))
        if alive.size:
            _, singular, vectors = np.linalg.svd(
                qr(shifted[:, alive] / deviation[alive], mode="r")[0][: alive.size]
            )
            singular = singular / np.sqrt(samples.shape[0])
            # rounding of the variables themselves looks like a direction of its own
            floor = max(tolerance, float(np.max(rounding[alive] / deviation[alive])))
            kept = singular > floor * singular[0]
            axes = vectors[: singular.size][kept].T
            axes *= np.sign(axes[np.argmax(np.abs(axes), axis=0), np.arange(axes.shape[1])])
            matrix = np.zeros((samples.shape[1], axes.shape[1]))
            matrix[alive] = axes / singular[kept] / deviation[alive, None]
        return cls(centre, matrix)

    def __call__(self, nodes: FloatArray) -> FloatArray:
        return (nodes - self.centre) @ self.matrix


class SampledBasis(Basis):
    """Polynomials orthonormal on samples; built by `from_samples`.

    indices are in the whitened directions; every term but the constant depends on all variables.
    """

    def __init__(self, whitening: Whitening, products: ProductBasis, factor: FloatArray) -> None:
        self.whitening = whitening
        self.products = products
        self.factor = factor  # (terms, terms), lower triangular: Ψ = factor @ Φ

    @classmethod
    def from_samples(
        cls,
        samples: FloatArray,
        degree: int,
        truncation: Truncation = total_degree,
        tolerance: float = 1e-8,
    ) -> SampledBasis:
        """Basis on samples (n, variables), up to a degree in the whitened directions."""
        whitening = Whitening.of(samples, tolerance)
        white = whitening(np.asarray(samples, dtype=np.float64))
        n, n_directions = white.shape
        equal = np.full(n, 1.0 / n)
        families = [recurrence_of_points(white[:, k], equal, degree) for k in range(n_directions)]
        indices = truncation(n_directions, degree)
        known = np.array([family.degree for family in families], dtype=np.int64)
        indices = indices[np.all(indices <= known, axis=1)][:n]
        while True:
            products = ProductBasis(families, indices)
            values = products.evaluate(white)
            upper = _triangle(values)
            length = np.sqrt(np.sum(upper * upper, axis=0))
            kept = np.abs(np.diag(upper)) > _DEPENDENT * length
            if kept.all():
                break
            indices = indices[kept]
        factor = _inverse_transposed(upper)
        # once more: twice is enough (Giraud, Langou & Rozložník 2005)
        factor = _inverse_transposed(_triangle(factor @ values)) @ factor
        return cls(whitening, products, factor)

    @property
    def n_variables(self) -> int:
        return int(self.whitening.matrix.shape[0])

    @property
    def indices(self) -> IntArray:
        return self.products.indices[: self.factor.shape[0]]

    @property
    def depends(self) -> BoolArray:
        varying = self.degrees > 0
        return np.repeat(varying[:, None], self.n_variables, axis=1)

    def fill(self, nodes: FloatArray, out: FloatArray) -> None:
        inner = np.empty((self.products.n_terms, nodes.shape[0]))
        self.products.fill(self.whitening(nodes), inner)
        out[...] = self.factor @ inner

    def gradient_block(self, nodes: FloatArray) -> FloatArray:
        inner = self.products.gradient_block(self.whitening(nodes))
        white = self.factor @ inner
        return np.asarray(np.einsum("vr,rtn->vtn", self.whitening.matrix, white))

    def take(self, terms: IntArray) -> SampledBasis:
        """The basis of some terms. They are rows of the factor; leading terms stay triangular."""
        terms = np.asarray(terms, dtype=np.int64)
        needed: IntArray = np.flatnonzero(np.any(self.factor[terms] != 0.0, axis=0))
        if np.array_equal(terms, np.arange(terms.size)):
            needed = terms
        factor = self.factor[np.ix_(terms, needed)]
        return _Part(self.whitening, self.products.take(needed), factor, self.indices[terms])

    def up_to(self, degree: int) -> SampledBasis:
        """The leading terms, of at most this degree: the same functions."""
        return self.take(np.flatnonzero(self.degrees <= degree))


class _Part(SampledBasis):
    """Some terms of a sampled basis."""

    def __init__(
        self, whitening: Whitening, products: ProductBasis, factor: FloatArray, indices: IntArray
    ) -> None:
        super().__init__(whitening, products, factor)
        self._indices = indices

    @property
    def indices(self) -> IntArray:
        return self._indices


def _triangle(values: FloatArray) -> FloatArray:
    """R of the QR factorisation of values (terms, n) transposed, over √n; terms <= n."""
    upper = qr(values.T, mode="r", check_finite=False)[0]
    return np.asarray(upper[: values.shape[0]] / np.sqrt(values.shape[1]))


def _inverse_transposed(upper: FloatArray) -> FloatArray:
    """R^{−T}, its diagonal made positive: lower triangular."""
    signs = np.sign(np.diag(upper))
    identity = np.eye(upper.shape[0])
    lower = solve_triangular(upper * signs[:, None], identity, trans="T", check_finite=False)
    return np.asarray(lower)
