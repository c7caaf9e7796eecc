"""x(0) = mean + L z with z standard normal: the uncertain start."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray


@dataclass(frozen=True, eq=False)
class Start:
    """A normal start: mean (d,), factor (d, r) with covariance = factor factor^T.

    r is the rank: directions of no variance are dropped, never divided by.
    """

    mean: FloatArray
    factor: FloatArray

    @property
    def rank(self) -> int:
        """Number of germ variables of the start."""
        return int(self.factor.shape[1])

    def states(self, germ: FloatArray) -> FloatArray:
        """States (n, d) of standard normal germ values (n, rank)."""
        return self.mean + germ @ self.factor.T

    @classmethod
    def from_covariance(cls, mean: FloatArray, covariance: FloatArray) -> Start:
        """Factor a symmetric positive semidefinite covariance (d, d).

        Scaled to a correlation matrix first, so that kilometres and radians do not meet in one
        tolerance; a diagonal one keeps its variables in the user's order.
        """
        std = np.sqrt(np.diag(covariance))
        live = np.flatnonzero(std > 0)
        factor = np.zeros((len(mean), 0))
        if live.size:
            scale = std[live]
            correlation = covariance[np.ix_(live, live)] / np.outer(scale, scale)
            if np.allclose(correlation, np.eye(live.size), rtol=0, atol=1e-15):
                root = np.eye(live.size)
            else:
                values, vectors = np.linalg.eigh(correlation)
                keep = values > 1e-12 * values[-1]
                root = (vectors[:, keep] * np.sqrt(values[keep]))[:, ::-1]
            factor = np.zeros((len(mean), root.shape[1]))
            factor[live] = scale[:, None] * root
        return cls(np.asarray(mean, float), factor)


def covariance_fault(matrix: FloatArray, size: int) -> str | None:
    """Why this cannot be the covariance of `size` components, or None."""
    if matrix.shape != (size, size):
        shape = " x ".join(str(n) for n in matrix.shape)
        return f"the covariance is {shape}; it must be {size} x {size}, one row a state component"
    if not np.all(np.isfinite(matrix)):
        return "the covariance has a value that is not finite"
    std = np.sqrt(np.abs(np.diag(matrix)))
    if np.any(np.diag(matrix) < 0):
        i = int(np.argmin(np.diag(matrix)))
        return f"variance {i + 1} on the diagonal is {matrix[i, i]:g}; it must be 0 or more"
    bound = np.outer(std, std)
    gap = np.abs(matrix - matrix.T)
    if np.any(gap > 1e-9 * bound):
        i, j = (int(k) for k in np.unravel_index(int(np.argmax(gap)), gap.shape))
        return (
            f"the covariance is not symmetric: entry ({i + 1}, {j + 1}) is {matrix[i, j]:g} "
            f"and ({j + 1}, {i + 1}) is {matrix[j, i]:g}; they must be equal"
        )
    scale = np.where(std > 0, std, 1.0)
    correlation = matrix / np.outer(scale, scale)
    if np.any(np.abs(matrix) > bound * (1 + 1e-9)):
        flat = int(np.argmax(np.abs(correlation)))
        i, j = (int(k) for k in np.unravel_index(flat, gap.shape))
        if i != j:
            return (
                f"entry ({i + 1}, {j + 1}) gives a correlation of {correlation[i, j]:.3g}; "
                "correlations lie in [-1, 1]"
            )
    lowest = float(np.linalg.eigvalsh(correlation)[0])
    if lowest < -1e-9 * size:
        return (
            "the covariance is not positive semidefinite: its correlation matrix has the "
            f"eigenvalue {lowest:.3g}, and none may be negative"
        )
    return None


def read_matrix(path: Path) -> FloatArray:
    """A square table of numbers, separated by commas or blanks; '#' starts a comment."""
    rows: list[list[float]] = []
    for number, line in enumerate(path.read_text(encoding="utf-8").splitlines(), start=1):
        text = line.split("#")[0].replace(",", " ").replace(";", " ").split()
        try:
            row = [float(word.replace("D", "E").replace("d", "e")) for word in text]
        except ValueError:
            raise ValueError(
                f"{path.name}, line {number}: not a row of numbers: {line!r}"
            ) from None
        if row:
            if rows and len(row) != len(rows[0]):
                raise ValueError(
                    f"{path.name}, line {number}: {len(row)} numbers, "
                    f"the rows before have {len(rows[0])}"
                )
            rows.append(row)
    return np.array(rows, dtype=float)
