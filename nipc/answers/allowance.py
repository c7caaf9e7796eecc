"""How loud may a source be before the box is no longer kept?"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.optimize import brentq

from nipc.arrays import FloatArray


class Probability(NamedTuple):
    """P(inside) and its interval at one scale."""

    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Allowance:
    """The largest scale at which P(inside) >= target; NaN with a reason where there is none.

    `low` is where the interval's low end falls below the target, `high` where its high end does.
    A scale equal to `limit` means: at least that much, `beyond` then being true. `reachable` is the
    range of P that the scales from 0 to the limit reach.
    """

    target: float
    scale: float
    low: float
    high: float
    reachable: tuple[float, float]
    beyond: bool
    monotone: bool
    reason: str | None
    scales: FloatArray
    probabilities: FloatArray


def find_allowance(
    probability: Callable[[float], Probability],
    target: float,
    limit: float = 8.0,
    precision: float = 1e-3,
    steps: int = 6,
) -> Allowance:
    """Largest s in [0, limit] with P(s) >= target, to `precision` of its size.

    `probability` must use the same members at every scale, so that P(s) is a fixed curve and not a
    noisy one. It is looked at on a grid of `steps` scales doubling up to the limit, and at zero;
    where it rises and falls, the first crossing counts, since all smaller scales looked at keep
    the box.
    """
    curve = _Curve(probability)
    grid = [0.0, *(limit / 2.0**k for k in range(steps - 1, -1, -1))]
    values = [curve(s) for s in grid]
    ends = [_crossing(curve, grid, part, target, precision) for part in range(3)]
    scales, table = curve.table()
    reachable = (float(table[:, 0].min()), float(table[:, 0].max()))
    central = [p.value for p in values]
    # rises within the interval's width are the curve's steps, not a second branch
    slack = 0.5 * max(p.high - p.low for p in values)
    reason = None
    if np.isnan(ends[0]):
        reason = (
            f"P(inside) is {central[0]:.4g} even at scale zero, below the target {target:g};"
            f" scales from 0 to {limit:g} reach {reachable[0]:.4g} to {reachable[1]:.4g}"
        )
    elif ends[0] >= limit:
        reason = (
            f"P(inside) is still {central[-1]:.4g} at the largest scale allowed, {limit:g};"
            f" the target {target:g} is kept up to there"
        )
    return Allowance(
        target=target,
        scale=ends[0],
        low=0.0 if np.isnan(ends[1]) and not np.isnan(ends[0]) else ends[1],
        high=ends[2],
        reachable=reachable,
        beyond=bool(ends[0] >= limit),
        monotone=bool(np.all(np.diff(central) <= slack)),
        reason=reason,
        scales=scales,
        probabilities=table,
    )


class _Curve:
    """P(scale), each scale asked for once."""

    def __init__(self, probability: Callable[[float], Probability]) -> None:
        self._probability = probability
        self._known: dict[float, Probability] = {}

    def __call__(self, scale: float) -> Probability:
        if scale not in self._known:
            self._known[scale] = Probability(*self._probability(scale))
        return self._known[scale]

    def table(self) -> tuple[FloatArray, FloatArray]:
        scales = sorted(self._known)
        return np.array(scales), np.array([self._known[s] for s in scales])

    def bracket(self, part: int, target: float, low: float, high: float) -> tuple[float, float]:
        """The tightest known scales between low and high that keep and miss the target."""
        for scale in sorted(self._known):
            if low < scale < high:
                if self._known[scale][part] < target:
                    return low, scale
                low = scale
        return low, high


def _crossing(
    curve: _Curve, grid: list[float], part: int, target: float, precision: float
) -> float:
    missed = [s for s in grid if curve(s)[part] < target]
    if not missed:
        return grid[-1]
    if missed[0] == 0.0:
        return float("nan")
    low, high = grid[grid.index(missed[0]) - 1], missed[0]
    low, high = curve.bracket(part, target, low, high)

    def excess(scale: float) -> float:
        return curve(scale)[part] - target

    return float(brentq(excess, low, high, xtol=precision * high, rtol=precision))
