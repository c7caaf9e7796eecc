"""q(s) = c_0 + c_1 s + c_2 s^2 + ...: a member's value by its orders in the strength of the noise.

The small-noise picture keeps orders 0 and 1. Here each member's value is taken at a few strengths
s in [-1, 1] (s Z and -s Z have the same law) and the polynomial through them is solved for: exact
on a single arc, whose members are polynomials in s, and to order four on a chain.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from nipc.answers import present
from nipc.answers.scaled import Scaled
from nipc.arrays import BoolArray, FloatArray
from nipc.chain.history import BLOCK

POINTS = 5
ROOM = 2.0  # where an arc's bounds stop a member, that is no response of the motion
NUMBERS = 1 << 25  # most float64 that the members of all points may take


@dataclass(frozen=True, eq=False)
class Orders:
    """Contributions of members (K, n, T, Q) at full strength, order k in [k]; orders 0 ... K - 1.

    Parts of orders two and more are what a linear picture leaves out.
    """

    parts: FloatArray

    def mean(self, order: int) -> FloatArray:
        """(T, Q) mean of an order's contribution."""
        return present.mean(self.parts[order])

    def std(self, order: int) -> FloatArray:
        """(T, Q) standard deviation of an order's contribution."""
        return present.std(self.parts[order])

    def beyond_linear(self, scale: float = 1.0) -> FloatArray:
        """(T, Q) sqrt(E (orders >= 2)^2 / Var q) at a strength; NaN where nothing varies."""
        powers = scale ** np.arange(len(self.parts))[:, None, None, None]
        parts = powers * self.parts
        rest, whole = parts[2:].sum(axis=0), parts.sum(axis=0)
        std = present.std(whole)
        floor = 64.0 * np.finfo(float).eps * np.abs(present.mean(whole))
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(std > floor, present.size(rest) / std, np.nan)


def orders_in(scaled: Scaled, moved: BoolArray, members: int = BLOCK) -> Orders:
    """The orders in a common strength of the groups `moved` (G,), all others as in the study."""
    kinds = {g.kind for g, m in zip(scaled.groups, moved, strict=True) if m}
    degree = scaled.polynomial_degree
    count = POINTS if degree is None else max(degree + 1, 3)
    # a parameter mirrored about its mean may leave what it can be; its strengths stay positive
    nodes = np.cos(np.pi * (np.arange(count) + 0.5) / count)
    nodes = 0.5 * (nodes + 1.0) if "parameter" in kinds else nodes
    each = scaled.times.size * len(scaled.study.quantity)
    n = max(50, min(members, scaled.study.ensemble.members, NUMBERS // (count * each)))
    before, scaled.room = scaled.room, ROOM
    values = np.stack([scaled.members(np.where(moved, s, 1.0), 0, n) for s in nodes])
    scaled.room = before
    return Orders(solved(nodes, values))


def solved(nodes: Sequence[float] | FloatArray, values: FloatArray) -> FloatArray:
    """Coefficients (K, ...) of the polynomials through values (K, ...) at K nodes.

    Solved for differences from the first value, so that a large constant costs no digits.
    """
    nodes = np.asarray(nodes, float)
    powers = np.vander(nodes, increasing=True)
    away = (values - values[0]).reshape(nodes.size, -1)
    parts = np.linalg.solve(powers, away).reshape(values.shape)
    parts[0] += values[0]
    return np.asarray(parts)
