"""When the kicks of a leg are given, and how large: moments of the path as two kicks.

Over a cell of length h around c the path acts through its moments w = int xi dt and
m = int (t - c) xi dt. Two kicks, w / 2 -+ sqrt(3) m / h at the Gauss points c -+ h / (2 sqrt(3)),
have both, so that a linear motion and its covariance are right to order h^4; one kick w at c has
the first alone, and is right to order h^2.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.problem.noise import Forcing


@dataclass(frozen=True, eq=False)
class KickTimes:
    """edges (C + 1,) of the cells, of which those that are `paired` (C,) have two kicks."""

    edges: FloatArray
    paired: BoolArray

    @classmethod
    def over(cls, times: FloatArray, legs: int, refined: int = 1) -> KickTimes:
        """At least `legs` x `refined` kicks from times[0] to times[-1], none on a time."""
        span = times[-1] - times[0]
        edges, paired = [times[:1]], []
        for a, b in itertools.pairwise(times):
            count = refined * max(1, int(np.ceil(legs * (b - a) / span - 1e-9)))
            cells = (count + 1) // 2
            edges.append(np.linspace(a, b, cells + 1)[1:])
            paired += [count > 1] * cells
        return cls(np.concatenate(edges), np.array(paired))

    @property
    def times(self) -> FloatArray:
        """(K,) when the kicks are given."""
        centre, length = self._cells()
        shift = np.where(self.paired, length / (2.0 * np.sqrt(3.0)), 0.0)
        return self._merged(centre - shift, centre + shift)

    @property
    def shares(self) -> FloatArray:
        """(K,) the time that each kick stands for."""
        length = np.where(self.paired, 0.5, 1.0) * self._cells()[1]
        return self._merged(length, length)

    def sizes(self, forcing: Forcing) -> FloatArray:
        """(n, K, J) the kicks."""
        whole = forcing.increments(self.edges)
        if not self.paired.any():
            return whole
        centre, length = self._cells()
        # Gauss points enough for the fastest function of the path
        most = max((b.terms for b in forcing.model.bases), default=1)
        nodes, weights = np.polynomial.legendre.leggauss(4 + most)
        points = centre[:, None] + 0.5 * length[:, None] * nodes
        table = forcing.table(points.ravel()).reshape(len(forcing), *points.shape, -1)
        # sqrt(3) m / h = sqrt(3) h / 4 int_-1^1 u xi du
        tilt = np.einsum("ncqj,q->ncj", table, weights * nodes)
        tilt *= (0.25 * np.sqrt(3.0) * length)[:, None]
        first = np.where(self.paired[:, None], 0.5 * whole - tilt, whole)
        return self._merged(first, 0.5 * whole + tilt, axis=1)

    def _cells(self) -> tuple[FloatArray, FloatArray]:
        return 0.5 * (self.edges[:-1] + self.edges[1:]), np.diff(self.edges)

    def _merged(self, first: FloatArray, second: FloatArray, axis: int = 0) -> FloatArray:
        """Two values a cell in order, of single cells the first alone."""
        both = np.stack([first, second], axis=axis + 1)
        flat = both.reshape(*first.shape[:axis], -1, *first.shape[axis + 1 :])
        chosen = np.stack([np.ones_like(self.paired), self.paired], axis=1).ravel()
        return np.compress(chosen, flat, axis=axis)
