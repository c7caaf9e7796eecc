"""Products of univariate polynomials, multiplied out from one another.

A term is its parent (the term without its last variable) times one univariate polynomial. Terms
that share a parent and take successive rows of the univariate table are one vector operation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.expansion.indices import explicit


@dataclass(frozen=True)
class Products:
    """How to multiply out the terms of an index set.

    copies: (first term, end, first table row) of runs of univariate terms;
    steps: (first term, end, parent, first table row) of runs with one parent;
    select: rows of the wanted terms when others had to be worked out on the way, else None.
    Table rows are numbered (degree − 1) · variables + variable.
    """

    n_worked: int
    copies: tuple[tuple[int, int, int], ...]
    steps: tuple[tuple[int, int, int, int], ...]
    select: IntArray | None

    @classmethod
    def plan(cls, indices: IntArray) -> Products:
        """Plan for an index set (terms, variables) whose first row is the constant."""
        if indices.shape[1] == 0:
            return cls(1, (), (), None)
        worked, parents, select = _closure(indices)
        n_variables = worked.shape[1]
        places = np.arange(n_variables) + 1
        last = np.max(np.where(worked > 0, places, 0), axis=1, initial=0) - 1
        rows = (worked[np.arange(worked.shape[0]), last] - 1) * n_variables + last
        copies: list[tuple[int, int, int]] = []
        steps: list[tuple[int, int, int, int]] = []
        start = 1
        for t in range(2, worked.shape[0] + 1):
            if (
                t < worked.shape[0]
                and parents[t] == parents[start]
                and rows[t] - rows[start] == t - start
            ):
                continue
            if start < worked.shape[0]:
                if parents[start] == 0:
                    copies.append((start, t, int(rows[start])))
                else:
                    steps.append((start, t, int(parents[start]), int(rows[start])))
            start = t
        return cls(worked.shape[0], tuple(copies), tuple(steps), select)

    def multiply(self, table: FloatArray, out: FloatArray) -> None:
        """Fill `out` (terms, n) from the univariate values `table` (degree + 1, variables, n)."""
        rows = table[1:].reshape((table.shape[0] - 1) * table.shape[1], table.shape[2])
        worked = out if self.select is None else np.empty((self.n_worked, out.shape[1]))
        worked[0] = 1.0
        for start, end, row in self.copies:
            worked[start:end] = rows[row : row + end - start]
        for start, end, parent, row in self.steps:
            np.multiply(rows[row : row + end - start], worked[parent], out=worked[start:end])
        if self.select is not None:
            np.take(worked, self.select, axis=0, out=out)


def _closure(indices: IntArray) -> tuple[IntArray, IntArray, IntArray | None]:
    """The set with all parents in it, each term's parent, and where the wanted terms are."""
    worked = indices
    while True:
        parent_indices = _without_last(worked)
        place = {row.tobytes(): k for k, row in enumerate(np.ascontiguousarray(worked))}
        parents = [place.get(row.tobytes(), -1) for row in parent_indices]
        missing = [k for k, parent in enumerate(parents) if parent < 0]
        if not missing:
            break
        worked = explicit(np.vstack([worked, parent_indices[missing]]))
    if worked is indices:
        return worked, np.array(parents, dtype=np.int64), None
    select = [place[row.tobytes()] for row in np.ascontiguousarray(indices)]
    return worked, np.array(parents, dtype=np.int64), np.array(select, dtype=np.int64)


def _without_last(indices: IntArray) -> IntArray:
    """Each index with its last variable taken out."""
    if indices.shape[1] == 0:
        return indices
    places = np.arange(indices.shape[1]) + 1
    last = np.max(np.where(indices > 0, places, 0), axis=1) - 1
    lowered = indices.copy()
    active = last >= 0
    lowered[np.flatnonzero(active), last[active]] = 0
    return np.ascontiguousarray(lowered)
