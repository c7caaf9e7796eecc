"""Orthonormal polynomial bases Ψ_t of several variables, E[Ψ_s Ψ_t] = δ_st, constant first.

A basis matrix is terms-first, (terms, n): each polynomial's values lie together in memory, and are
worked out for a block of nodes at a time, so that they stay in the processor's cache.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.errors import FitError, InputError
from nipc.expansion.indices import total_degree
from nipc.expansion.memory import refuse_beyond_memory
from nipc.expansion.products import Products
from nipc.expansion.recurrence import (
    Recurrence,
    hermite,
    recurrence_of,
    univariate_slopes,
    univariate_table,
)

BLOCK = 2048  # nodes worked out together; 120 terms of them are 2 MB


class Basis(ABC):
    """Orthonormal functions of nodes (n, n_variables)."""

    @property
    @abstractmethod
    def n_variables(self) -> int:
        """Columns of a node array."""

    @property
    @abstractmethod
    def indices(self) -> IntArray:
        """Multi-indices (terms, directions); the constant first."""

    @property
    @abstractmethod
    def depends(self) -> BoolArray:
        """(terms, n_variables): whether a term depends on a variable."""

    @abstractmethod
    def fill(self, nodes: FloatArray, out: FloatArray) -> None:
        """Write the values at a block of nodes to `out` (terms, n)."""

    @abstractmethod
    def gradient_block(self, nodes: FloatArray) -> FloatArray:
        """Derivatives at a block of nodes, (n_variables, terms, n)."""

    @abstractmethod
    def take(self, terms: IntArray) -> Basis:
        """The basis of some of the terms only; the first of them is the constant."""

    @property
    def n_terms(self) -> int:
        return int(self.indices.shape[0])

    @property
    def degrees(self) -> IntArray:
        """Total degree of each term."""
        return np.asarray(self.indices.sum(axis=1))

    def evaluate(self, nodes: FloatArray) -> FloatArray:
        """Ψ_t(x) at nodes (n, n_variables): basis matrix (terms, n)."""
        nodes = self.checked(nodes)
        refuse_beyond_memory(
            8 * self.n_terms * nodes.shape[0],
            f"a basis matrix of {self.n_terms:,} terms at {nodes.shape[0]:,} nodes",
        )
        out = np.empty((self.n_terms, nodes.shape[0]))
        for rows in blocks(nodes.shape[0]):
            self.fill(nodes[rows], out[:, rows])
        return out

    def gradient(self, nodes: FloatArray) -> FloatArray:
        """∂Ψ_t/∂x_v at nodes (n, n_variables): (terms, n, n_variables)."""
        return np.moveaxis(self.gradient_block(self.checked(nodes)), 0, 2)

    def christoffel(self, nodes: FloatArray) -> FloatArray:
        """K(x) = Σ_t Ψ_t(x)²: (n,); its mean over the germ is the number of terms.

        Large values mark nodes where a fit has little to hold on to.
        """
        nodes = self.checked(nodes)
        sums = np.empty(nodes.shape[0])
        work = np.empty((self.n_terms, min(BLOCK, nodes.shape[0])))
        for rows in blocks(nodes.shape[0]):
            part = work[:, : rows.stop - rows.start]
            self.fill(nodes[rows], part)
            np.einsum("tn,tn->n", part, part, out=sums[rows])
        return sums

    def checked(self, nodes: FloatArray) -> FloatArray:
        nodes = np.asarray(nodes, dtype=np.float64)
        if nodes.ndim != 2 or nodes.shape[1] != self.n_variables:
            raise InputError(
                f"nodes of shape {nodes.shape}: this basis takes (n, {self.n_variables})"
            )
        return nodes


class ProductBasis(Basis):
    """Ψ_i(x) = Π_v p_{i_v}(x_v) in independent variables.

    recurrences: one family per variable; indices (terms, variables).
    """

    def __init__(self, recurrences: Sequence[Recurrence], indices: IntArray) -> None:
        indices = np.ascontiguousarray(indices, dtype=np.int64)
        if indices.ndim != 2 or indices.shape[1] != len(recurrences):
            raise InputError(
                f"an index set of shape {indices.shape} does not go with "
                f"{len(recurrences)} variables"
            )
        if indices.shape[0] == 0 or indices[0].any():
            raise InputError("the first multi-index is the constant, all zeros")
        highest = indices.max(axis=0, initial=0)
        for v, family in enumerate(recurrences):
            if highest[v] > family.degree:
                raise FitError(
                    f"variable {v} has polynomials up to degree {family.degree}, not {highest[v]}"
                )
        self._indices = indices
        self._depends = indices > 0
        self._active = [int(v) for v in np.flatnonzero(highest)]
        self._degree = int(highest.max(initial=0))
        self.recurrences = tuple(recurrences)
        self._families = [recurrences[v] for v in self._active]
        self._products = Products.plan(indices[:, self._active])

    @classmethod
    def from_distributions(cls, distributions: Any, indices: IntArray) -> ProductBasis:
        """Basis of independent chaospy distributions: a joint one, or one per variable."""
        parts = list(distributions)
        if getattr(distributions, "stochastic_dependent", False):
            raise InputError("dependent variables have no product basis; use SampledBasis")
        highest = np.max(np.atleast_2d(indices), axis=0, initial=0)
        return cls(
            [recurrence_of(part, int(k)) for part, k in zip(parts, highest, strict=True)], indices
        )

    @classmethod
    def standard_normal(cls, n_variables: int, degree: int) -> ProductBasis:
        """Hermite polynomials of total degree in independent standard normal variables."""
        return cls([hermite(degree)] * n_variables, total_degree(n_variables, degree))

    @property
    def n_variables(self) -> int:
        return len(self.recurrences)

    @property
    def indices(self) -> IntArray:
        return self._indices

    @property
    def depends(self) -> BoolArray:
        return self._depends

    def fill(self, nodes: FloatArray, out: FloatArray) -> None:
        table = univariate_table(self._families, nodes[:, self._active], self._degree)
        self._products.multiply(table, out)

    def gradient_block(self, nodes: FloatArray) -> FloatArray:
        inner = nodes[:, self._active]
        table = univariate_table(self._families, inner, self._degree)
        slopes = univariate_slopes(self._families, inner, table)
        out = np.zeros((self.n_variables, self.n_terms, nodes.shape[0]))
        for k, v in enumerate(self._active):
            # d/dx_v of a product: that one factor replaced by its slope
            values = table[:, k].copy()
            table[:, k] = slopes[:, k]
            self._products.multiply(table, out[v])
            table[:, k] = values
            out[v, ~self._depends[:, v]] = 0.0
        return out

    def take(self, terms: IntArray) -> ProductBasis:
        return ProductBasis(self.recurrences, self._indices[terms])


def blocks(n: int, size: int = BLOCK) -> Iterator[slice]:
    """0 … n in slices of at most `size`."""
    for start in range(0, n, size):
        yield slice(start, min(start + size, n))
