"""q(t) = c_0(t) + sum_k c_k(t) z_k + rest: the linear part of a chain's quantities, on its members.

Least squares on members drawn from the germ, so c_k = E q z_k up to sampling. Columns are in the
order of time, and an output is fitted on those before it only: noise to come has no part in it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from nipc.arrays import FloatArray, IntArray
from nipc.errors import InputError


@dataclass(frozen=True, eq=False)
class LinearPart:
    """Fit of outputs (T, Q) on germ columns, the constant among them.

    `columns` (T,) of the first live columns are used at each time; `q`, `r` factor the live columns
    (members by germ), `projected` (live, T, Q) are the outputs on q; total, rest (T, Q) their
    variance and what of it no column explains, NaN where a member is missing.
    """

    live: IntArray
    width: int
    columns: IntArray
    members: int
    r: FloatArray
    projected: FloatArray
    total: FloatArray
    rest: FloatArray

    @classmethod
    def of(cls, germ: FloatArray, known: IntArray, outputs: FloatArray) -> LinearPart:
        """From germ (n, P), outputs (n, T, Q), and how many columns each time knows (T,)."""
        n, width = germ.shape
        live = np.flatnonzero(np.any(germ != 0.0, axis=0))
        if n <= live.size + 1:
            raise InputError(f"{n} members cannot tell {live.size} linear effects")
        q, r = np.linalg.qr(germ[:, live])
        columns = np.searchsorted(live, known)
        flat = outputs.reshape(n, -1)
        usable = np.isfinite(flat).all(axis=0)
        flat = np.where(usable, flat, 0.0)
        centred = flat - flat.mean(axis=0)
        projected = (q.T @ centred).reshape(live.size, *outputs.shape[1:])
        total = np.sum(centred**2, axis=0).reshape(outputs.shape[1:])
        rest = total - np.array(
            [np.sum(projected[:count, t] ** 2, axis=0) for t, count in enumerate(columns)]
        )
        freedom = np.maximum(n - columns, 1)[:, None]
        absent = np.where(usable.reshape(total.shape), 1.0, np.nan)
        return cls(
            live, width, columns, n, r, projected,
            absent * total / (n - 1), absent * np.maximum(rest, 0.0) / freedom,
        )  # fmt: skip

    @property
    def share_beyond(self) -> FloatArray:
        """(T, Q) share of the variance beyond the linear part; NaN without variance."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(self.total > 0.0, np.clip(self.rest / self.total, 0.0, 1.0), np.nan)

    def coefficients(self, time: int, quantity: int) -> FloatArray:
        """(P,) of one output; zero for columns that it does not know."""
        count = int(self.columns[time])
        result = np.zeros(self.width)
        result[self.live[:count]] = solve_triangular(
            self.r[:count, :count], self.projected[:count, time, quantity]
        )
        return result

    def noise(self, time: int, quantity: int) -> float:
        """Variance of a coefficient's error: rest / (members - columns), germ being standard."""
        count = int(self.columns[time])
        return float(self.rest[time, quantity]) / max(self.members - count, 1)
