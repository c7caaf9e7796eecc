"""Orthonormal polynomials of one variable, by their three-term recurrence.

    z p_k(z) = √b_{k+1} p_{k+1}(z) + a_k p_k(z) + √b_k p_{k-1}(z),   p_0 = 1,   z = (x − m) / s

The variable is standardised by its mean m and standard deviation s before anything else, so that
the coefficients are of order one and the recurrence stays stable at high degrees.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import eigh_tridiagonal

from nipc.arrays import FloatArray
from nipc.errors import InputError
from nipc.expansion.measures import discretise


@dataclass(frozen=True)
class Recurrence:
    """Coefficients of an orthonormal family up to a degree.

    shift, scale: mean and standard deviation of the variable, in its own unit;
    diagonal (degree + 1,): a_0 … a_degree; off_diagonal (degree,): √b_1 … √b_degree, in units of
    the standardised variable.
    """

    shift: float
    scale: float
    diagonal: FloatArray
    off_diagonal: FloatArray

    @property
    def degree(self) -> int:
        return int(self.off_diagonal.size)

    def evaluate(self, x: FloatArray, degree: int | None = None) -> FloatArray:
        """p_0 … p_degree at x (n,): (degree + 1, n)."""
        return univariate_table([self], x[:, None], self._at_most(degree))[:, 0]

    def derivative(self, x: FloatArray, degree: int | None = None) -> FloatArray:
        """dp_k/dx at x (n,): (degree + 1, n), per unit of x."""
        degree = self._at_most(degree)
        values = univariate_table([self], x[:, None], degree)
        return univariate_slopes([self], x[:, None], values)[:, 0]

    def gauss(self, n_nodes: int) -> tuple[FloatArray, FloatArray]:
        """Nodes and weights of the Gauss rule, exact to degree 2 n_nodes − 1 (Golub & Welsch 1969).

        `n_nodes` is at most degree + 1; the weights sum to 1.
        """
        if not 1 <= n_nodes <= self.degree + 1:
            raise InputError(f"a Gauss rule of 1 to {self.degree + 1} nodes, not {n_nodes}")
        nodes, vectors = eigh_tridiagonal(self.diagonal[:n_nodes], self.off_diagonal[: n_nodes - 1])
        return np.asarray(self.shift + self.scale * nodes), np.asarray(vectors[0] ** 2)

    def _at_most(self, degree: int | None) -> int:
        if degree is None:
            return self.degree
        if not 0 <= degree <= self.degree:
            raise InputError(f"degree {degree}: this family is known from 0 to {self.degree}")
        return degree


def hermite(degree: int) -> Recurrence:
    """Polynomials orthonormal in a standard normal variable: He_k / √k!."""
    return Recurrence(0.0, 1.0, np.zeros(degree + 1), np.sqrt(np.arange(1.0, degree + 1.0)))


def legendre(degree: int, lower: float = -1.0, upper: float = 1.0) -> Recurrence:
    """Polynomials orthonormal in a variable uniform on [lower, upper]: √(2k+1) P_k."""
    k = np.arange(1.0, degree + 1.0)
    half = 0.5 * (upper - lower)
    return Recurrence(
        0.5 * (lower + upper),
        half / np.sqrt(3.0),
        np.zeros(degree + 1),
        np.sqrt(3.0 * k * k / (4.0 * k * k - 1.0)),
    )


def recurrence_of(distribution: Any, degree: int) -> Recurrence:
    """Polynomials orthonormal in a one-dimensional chaospy distribution.

    Where chaospy knows the coefficients in closed form they are taken from it; otherwise the
    density is discretised adaptively and the Stieltjes procedure run on it (Gautschi 2004,
    Orthogonal Polynomials, section 2.2).
    """
    if len(distribution) != 1:
        raise InputError("one recurrence belongs to one variable; take the distribution apart")
    known = _closed_form(distribution, degree)
    if known is None:
        nodes, weights = discretise(distribution)
        return recurrence_of_points(nodes, weights, degree)
    return known


def recurrence_of_points(points: FloatArray, weights: FloatArray, degree: int) -> Recurrence:
    """Polynomials orthonormal on weighted points (Stieltjes procedure).

    Points of fewer distinct values than degree + 1 carry no further polynomial: the family ends
    at the last degree that they determine.
    """
    weights = weights / weights.sum()
    shift = float(weights @ points)
    scale = float(np.sqrt(weights @ (points - shift) ** 2))
    if not scale > 8.0 * np.finfo(np.float64).eps * np.max(np.abs(points)):
        return Recurrence(shift, 1.0, np.zeros(1), np.zeros(0))
    z = (points - shift) / scale
    before, now, root = np.zeros_like(z), np.ones_like(z), 0.0
    diagonal, off_diagonal = [], []
    for k in range(degree + 1):
        a = float(weights @ (z * now * now))
        diagonal.append(a)
        if k == degree:
            break
        after = (z - a) * now - root * before
        root = float(np.sqrt(weights @ (after * after)))
        if root <= 1e-10 * np.max(np.abs(z)):
            break
        off_diagonal.append(root)
        before, now = now, after / root
    return Recurrence(shift, scale, np.array(diagonal), np.array(off_diagonal))


def univariate_table(
    recurrences: Sequence[Recurrence], nodes: FloatArray, degree: int
) -> FloatArray:
    """Values of all families at once: nodes (n, variables) -> (degree + 1, variables, n).

    Families known to a lower degree are zero beyond it.
    """
    shift, scale, diagonal, off_diagonal = _stacked(recurrences, degree)
    table = np.empty((degree + 1, len(recurrences), nodes.shape[0]))
    table[0] = 1.0
    if degree == 0:
        return table
    z = (nodes.T - shift) / scale
    for k in range(degree):
        row = table[k + 1]
        np.subtract(z, diagonal[k], out=row)
        row *= table[k]
        if k:
            row -= off_diagonal[k - 1] * table[k - 1]
        row *= _inverse(off_diagonal[k])
    return table


def univariate_slopes(
    recurrences: Sequence[Recurrence], nodes: FloatArray, table: FloatArray
) -> FloatArray:
    """Derivatives that go with a table of values: (degree + 1, variables, n), per unit of x."""
    degree = table.shape[0] - 1
    shift, scale, diagonal, off_diagonal = _stacked(recurrences, degree)
    slopes = np.zeros_like(table)
    z = (nodes.T - shift) / scale
    for k in range(degree):
        row = slopes[k + 1]
        np.subtract(z, diagonal[k], out=row)
        row *= slopes[k]
        row += table[k]
        if k:
            row -= off_diagonal[k - 1] * slopes[k - 1]
        row *= _inverse(off_diagonal[k])
    slopes /= scale
    return slopes


def _inverse(off_diagonal: FloatArray) -> FloatArray:
    safe = np.where(off_diagonal > 0.0, off_diagonal, 1.0)
    return np.where(off_diagonal > 0.0, 1.0 / safe, 0.0)


def _stacked(
    recurrences: Sequence[Recurrence], degree: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Coefficients side by side, (…, variables, 1), padded by zeros."""
    count = len(recurrences)
    diagonal = np.zeros((degree + 1, count, 1))
    off_diagonal = np.zeros((degree, count, 1))
    for j, family in enumerate(recurrences):
        n = min(degree + 1, family.diagonal.size)
        diagonal[:n, j, 0] = family.diagonal[:n]
        n = min(degree, family.off_diagonal.size)
        off_diagonal[:n, j, 0] = family.off_diagonal[:n]
    shift = np.array([family.shift for family in recurrences])[:, None]
    scale = np.array([family.scale for family in recurrences])[:, None]
    return shift, scale, diagonal, off_diagonal


def _closed_form(distribution: Any, degree: int) -> Recurrence | None:
    """chaospy's own coefficients, or None when it has none for this distribution."""
    from chaospy import UnsupportedFeature

    try:
        alpha, beta = distribution.ttr(np.arange(degree + 2))
    except UnsupportedFeature:
        return None
    alpha, beta = np.ravel(alpha), np.ravel(beta)
    shift, scale = float(alpha[0]), float(np.sqrt(beta[1]))
    return Recurrence(
        shift, scale, (alpha[: degree + 1] - shift) / scale, np.sqrt(beta[1 : degree + 1]) / scale
    )
