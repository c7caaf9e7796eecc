"""Quantiles of an ensemble, from members kept in single precision about a fixed centre."""

from __future__ import annotations

import numpy as np

from nipc.answers.batches import centre_of
from nipc.answers.intervals import LEVEL, Interval, quantile_ranks
from nipc.arrays import FloatArray


class QuantileAccumulator:
    """Keeps the first `limit` members, 4 bytes a value: 1e5 members x 200 times x 3 take 240 MB.

    What is kept is the distance from the first block's mean, so that single precision is relative
    to the spread and not to the value.
    """

    def __init__(self, limit: int = 100_000) -> None:
        self.limit = limit
        self._blocks: list[np.ndarray] = []
        self._centre: FloatArray | None = None
        self.members = 0

    def update(self, values: FloatArray) -> None:
        """Add a block of members, (n, T, Q); NaN is missing."""
        values = np.asarray(values, float)[: max(self.limit - self.members, 0)]
        if values.shape[0] == 0:
            return
        if self._centre is None:
            self._centre = centre_of(values)
        away = np.moveaxis(values - self._centre, 0, -1)
        self._blocks.append(np.ascontiguousarray(away, dtype=np.float32))
        self.members += values.shape[0]

    def _sorted(self) -> np.ndarray:
        """(T, Q, n), missing values last."""
        if not self._blocks:
            raise ValueError("no members have been added yet")
        if len(self._blocks) > 1:
            self._blocks = [np.concatenate(self._blocks, axis=-1)]
        self._blocks[0].sort(axis=-1)
        return self._blocks[0]

    def quantiles(self, levels: tuple[float, ...]) -> FloatArray:
        """(L, T, Q), interpolated linearly between order statistics; NaN where none is present."""
        kept = self._sorted()
        count = np.isfinite(kept).sum(axis=-1)
        result = np.empty((len(levels), *count.shape))
        for row, q in enumerate(levels):
            place = q * np.maximum(count - 1, 0)
            low = np.floor(place).astype(int)
            high = np.minimum(low + 1, np.maximum(count - 1, 0))
            part = place - low
            result[row] = (1.0 - part) * _pick(kept, low) + part * _pick(kept, high)
        result[:, count == 0] = np.nan
        return np.asarray(result + self._centre)

    def interval(self, q: float, level: float = LEVEL) -> Interval:
        """Of quantile q, (T, Q), by order statistics.

        Raises InputError when there are too few members anywhere but where none is present.
        """
        kept = self._sorted()
        count = np.isfinite(kept).sum(axis=-1)
        low, high = np.zeros_like(count), np.zeros_like(count)
        for n in np.unique(count[count > 0]):
            low[count == n], high[count == n] = quantile_ranks(q, int(n), level)
        ends = [np.where(count > 0, _pick(kept, rank), np.nan) for rank in (low, high)]
        assert self._centre is not None
        return Interval(ends[0] + self._centre, ends[1] + self._centre)


def _pick(kept: np.ndarray, rank: np.ndarray) -> FloatArray:
    return np.take_along_axis(kept, rank[..., None], axis=-1)[..., 0].astype(float)
