"""Does the motion stay in its box, with what probability and for how long?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from nipc.answers.boxes import Box, presence
from nipc.answers.intervals import LEVEL, Interval, wilson
from nipc.arrays import FloatArray, IntArray


@dataclass(frozen=True)
class Confinement:
    """What the members say of K boxes at T times; probabilities and their ends are (K, T).

    inside = P(in the box at t); survival = P(in it at all output times up to t). Times between
    outputs are not looked at: survival of a rough quantity is overstated (see `monitoring`).
    """

    times: FloatArray
    boxes: tuple[Box, ...]
    inside: FloatArray
    inside_interval: Interval
    survival: FloatArray
    survival_interval: Interval
    members: IntArray  # seen at each time, (K, T)

    def exit_quantiles(self, levels: Sequence[float]) -> tuple[FloatArray, Interval]:
        """Times by which shares `levels` have left, (L, K), with their intervals.

        The first output time at which that share is outside; infinite when later than the horizon.
        """
        low, high = self.survival_interval
        return (
            self._first(self.survival, levels),
            Interval(self._first(low, levels), self._first(high, levels)),
        )

    def _first(self, survival: FloatArray, levels: Sequence[float]) -> FloatArray:
        result = np.full((len(levels), survival.shape[0]), np.inf)
        for row, level in enumerate(levels):
            left = survival <= 1.0 - level + 1e-12
            some = left.any(axis=1)
            result[row, some] = self.times[left.argmax(axis=1)[some]]
        return result

    @property
    def empty_at_start(self) -> tuple[str, ...]:
        """Names of the boxes in which no member starts."""
        return tuple(
            box.name for box, p in zip(self.boxes, self.inside[:, 0], strict=True) if p == 0.0
        )


class ConfinementAccumulator:
    """Counts, block by block of members, who is inside and who has left for the first time.

    `margin` (T, Q) is the 95 % half-width of the path error (fit and check): the intervals then
    reach from the box narrowed by it to the box widened by it, since a member whose path is off by
    no more than the margin lies between. A physically ended member has left; a missing one (NaN
    without an end) is out of the count at that time, and for survival censored from then on, by
    the product-limit estimator of Kaplan & Meier 1958.
    """

    def __init__(
        self, times: FloatArray, boxes: Sequence[Box], margin: FloatArray | None = None
    ) -> None:
        self.times, self.boxes = np.asarray(times, float), tuple(boxes)
        self.margin = margin
        self._margins: list[FloatArray | float] = [0.0]
        if margin is not None:
            self._margins += [margin, -margin]
        shape = (len(self._margins), len(self.boxes), self.times.size)
        self._inside, self._seen = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
        self._left, self._lost = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
        self.members = 0

    def update(self, values: FloatArray, ended: FloatArray | None = None) -> None:
        """Add a block of members (n, T, Q); `ended` (n,) is NaN where one did not end."""
        horizon = self.times.size
        for m, margin in enumerate(self._margins):
            for k, box in enumerate(self.boxes):
                there = presence(values, self.times, box, ended, margin)
                outside, missing = there.seen & ~there.inside, ~there.seen
                self._inside[m, k] += there.inside.sum(axis=0)
                self._seen[m, k] += there.seen.sum(axis=0)
                first_out, first_missing = _first(outside), _first(missing)
                left = first_out < first_missing
                self._left[m, k] += _histogram(first_out[left], horizon)
                self._lost[m, k] += _histogram(first_missing[~left], horizon)
        self.members += values.shape[0]

    def result(self, level: float = LEVEL) -> Confinement:
        """The probabilities and their intervals, which hold ensemble size and margin."""
        inside, inside_interval = self._bracket(self._shares(level))
        survival, survival_interval = self._bracket(self._survivals(level))
        return Confinement(
            self.times, self.boxes, inside, inside_interval, survival, survival_interval,
            self._seen[0],
        )  # fmt: skip

    def _shares(self, level: float) -> list[tuple[FloatArray, Interval]]:
        result = []
        for inside, seen in zip(self._inside, self._seen, strict=True):
            with np.errstate(invalid="ignore"):
                share = np.where(seen > 0, inside / np.maximum(seen, 1), np.nan)
            result.append((share, wilson(share, seen.astype(float), level)))
        return result

    def _survivals(self, level: float) -> list[tuple[FloatArray, Interval]]:
        return [
            product_limit(self.members, left, lost, level)
            for left, lost in zip(self._left, self._lost, strict=True)
        ]

    def _bracket(self, versions: list[tuple[FloatArray, Interval]]) -> tuple[FloatArray, Interval]:
        value, interval = versions[0]
        if len(versions) == 1:
            return value, interval
        narrowed, widened = versions[1][1], versions[2][1]
        return value, Interval(
            np.minimum(interval.low, narrowed.low), np.maximum(interval.high, widened.high)
        )


def product_limit(
    members: int, left: IntArray, lost: IntArray, level: float = LEVEL
) -> tuple[FloatArray, Interval]:
    """S(t) = prod (1 - left / at risk), from the counts (..., T) of first exits and of losses.

    Those lost at a time were not seen at it. Wilson's interval with the effective number of members
    that Greenwood's variance stands for (Greenwood 1926), which without losses is their number.
    """
    risk = members - np.cumsum(left + lost, axis=-1) + left
    some = np.maximum(risk, 1)
    survival = np.asarray(np.cumprod(1.0 - left / some, axis=-1), float)
    survival = np.where((risk > 0) | (survival == 0.0), survival, np.nan)  # all others were lost
    with np.errstate(invalid="ignore", divide="ignore"):
        greenwood = np.cumsum(left / (some * (some - left)), axis=-1)
        effective = (1.0 - survival) / (survival * greenwood)
    effective = np.where(survival >= 1.0, risk, effective)
    effective = np.where(survival == 0.0, members - np.cumsum(lost, axis=-1), effective)
    return survival, wilson(survival, effective, level)


def _first(flags: np.ndarray) -> IntArray:
    """Index of the first true value of each row, or the row's length."""
    return np.asarray(np.where(flags.any(axis=1), flags.argmax(axis=1), flags.shape[1]))


def _histogram(places: IntArray, length: int) -> IntArray:
    return np.bincount(places, minlength=length + 1)[:length]
