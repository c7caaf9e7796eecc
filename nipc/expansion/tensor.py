"""Products of two independent blocks of variables, each with a basis and a degree of its own.

    Ψ_{(a, b)}(x, z) = A_a(x) B_b(z),   deg a <= p_A,  deg b <= p_B,  deg a + deg b <= p

The use is a correlated state (SampledBasis) with fresh noise (ProductBasis): high degrees in the
one and low degrees in the other.
"""

from __future__ import annotations

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.errors import InputError
from nipc.expansion.basis import Basis


class TensorBasis(Basis):
    """left: basis of the first columns of a node, right: of the others; pairs (terms, 2) of their
    terms, the first pair (0, 0)."""

    def __init__(self, left: Basis, right: Basis, pairs: IntArray) -> None:
        if pairs.shape[0] == 0 or pairs[0].any():
            raise InputError("the first pair of terms is that of the constants, (0, 0)")
        self.left = left
        self.right = right
        self.pairs = np.ascontiguousarray(pairs, dtype=np.int64)
        self._indices = np.hstack([left.indices[pairs[:, 0]], right.indices[pairs[:, 1]]])
        self._depends = np.hstack([left.depends[pairs[:, 0]], right.depends[pairs[:, 1]]])
        self._runs = _runs(self.pairs)

    @classmethod
    def joint(
        cls, left: Basis, right: Basis, left_degree: int, right_degree: int, degree: int
    ) -> TensorBasis:
        """All pairs within the three degrees, total degrees ascending."""
        a, b = left.degrees, right.degrees
        total = a[:, None] + b
        allowed = (a[:, None] <= left_degree) & (b <= right_degree) & (total <= degree)
        pairs = np.argwhere(allowed)
        order = np.argsort(total[pairs[:, 0], pairs[:, 1]], kind="stable")
        return cls(left, right, pairs[order])

    @property
    def n_variables(self) -> int:
        return self.left.n_variables + self.right.n_variables

    @property
    def indices(self) -> IntArray:
        """(terms, directions of the left + variables of the right)."""
        return self._indices

    @property
    def depends(self) -> BoolArray:
        return self._depends

    @property
    def left_degrees(self) -> IntArray:
        return self.left.degrees[self.pairs[:, 0]]

    @property
    def right_degrees(self) -> IntArray:
        return self.right.degrees[self.pairs[:, 1]]

    def fill(self, nodes: FloatArray, out: FloatArray) -> None:
        split = self.left.n_variables
        left = np.empty((self.left.n_terms, nodes.shape[0]))
        right = np.empty((self.right.n_terms, nodes.shape[0]))
        self.left.fill(nodes[:, :split], left)
        self.right.fill(nodes[:, split:], right)
        self._multiply(left, right, out)

    def gradient_block(self, nodes: FloatArray) -> FloatArray:
        split = self.left.n_variables
        left = np.empty((self.left.n_terms, nodes.shape[0]))
        right = np.empty((self.right.n_terms, nodes.shape[0]))
        self.left.fill(nodes[:, :split], left)
        self.right.fill(nodes[:, split:], right)
        out = np.empty((self.n_variables, self.n_terms, nodes.shape[0]))
        for v, slope in enumerate(self.left.gradient_block(nodes[:, :split])):
            self._multiply(slope, right, out[v])
        for v, slope in enumerate(self.right.gradient_block(nodes[:, split:])):
            self._multiply(left, slope, out[split + v])
        return out

    def take(self, terms: IntArray) -> TensorBasis:
        return TensorBasis(self.left, self.right, self.pairs[terms])

    def _multiply(self, left: FloatArray, right: FloatArray, out: FloatArray) -> None:
        for start, end, a, b in self._runs:
            np.multiply(left[a], right[b : b + end - start], out=out[start:end])


def _runs(pairs: IntArray) -> tuple[tuple[int, int, int, int], ...]:
    """(first term, end, left term, first right term) of runs of one left and successive rights."""
    breaks = (np.diff(pairs[:, 0]) != 0) | (np.diff(pairs[:, 1]) != 1)
    starts = np.concatenate([[0], np.flatnonzero(breaks) + 1])
    ends = np.concatenate([starts[1:], [pairs.shape[0]]])
    return tuple(
        (int(s), int(e), int(pairs[s, 0]), int(pairs[s, 1]))
        for s, e in zip(starts, ends, strict=True)
    )
