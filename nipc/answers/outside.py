"""Members whom a scale takes outside what the runs cover: where they are is a guess, and so said.

A probability then lies between what it is if none of them is in the box and what it is if all are.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from nipc.answers.boxes import Box
from nipc.answers.confinement import Confinement, ConfinementAccumulator
from nipc.answers.intervals import Interval
from nipc.arrays import BoolArray, FloatArray


class DoubtfulConfinement:
    """A confinement whose intervals hold wherever the members outside may be."""

    def __init__(self, times: FloatArray, boxes: Sequence[Box], margin: FloatArray) -> None:
        self._all = ConfinementAccumulator(times, boxes, margin)
        self._sure = ConfinementAccumulator(times, boxes)  # those outside count as having left
        self._outside = 0

    def update(
        self, values: FloatArray, ended: FloatArray | None, outside: BoolArray | None
    ) -> None:
        """Add a block (n, T, Q); `outside` (n,) are in doubt, None: none is."""
        self._all.update(values, ended)
        gone = ended
        if outside is not None and outside.any():
            # before all times, and finite, as the times of those that ended are
            gone = np.where(outside, -1e300, np.nan if ended is None else ended)
            self._outside += int(outside.sum())
        self._sure.update(values, gone)

    def result(self) -> Confinement:
        """The probabilities, their intervals widened by the doubt."""
        told = self._all.result()
        if not self._outside:
            return told
        sure = self._sure.result()
        share = self._outside / self._all.members

        def wide(interval: Interval, least: Interval) -> Interval:
            high = np.minimum(least.high + share, 1.0)
            return Interval(np.fmin(interval.low, least.low), np.fmax(interval.high, high))

        return replace(
            told,
            inside_interval=wide(told.inside_interval, sure.inside_interval),
            survival_interval=wide(told.survival_interval, sure.survival_interval),
        )
