"""Moments of an ensemble, gathered block by block of its members."""

from __future__ import annotations

import numpy as np

from nipc.answers.batches import batch_products, batch_sums, centre_of
from nipc.answers.intervals import LEVEL, Interval, mean_interval, std_interval
from nipc.arrays import FloatArray


class MomentAccumulator:
    """Mean, standard deviation and kurtosis over members, at each time and quantity (T, Q).

    Blocks of members (n, T, Q) are summed as powers of their distance from the first block's mean,
    so that nothing cancels, and per batch of members, so that the diffusion law knows how its
    variances are correlated in time. NaN is missing, and left out.
    """

    def __init__(self, batches: int = 100) -> None:
        self.batches = batches
        self.members = 0
        self._centre: FloatArray | None = None
        self._sums: FloatArray | None = None  # (5, B, T, Q): powers 0 to 4

    def update(self, values: FloatArray) -> None:
        """Add a block of members, (n, T, Q)."""
        values = np.asarray(values, float)
        if self._centre is None or self._sums is None:
            self._centre = centre_of(values)
            self._sums = np.zeros((5, self.batches, *values.shape[1:]))
        away = values - self._centre
        present = np.isfinite(away)
        if present.all():
            self._sums[0] += batch_sums(np.ones((len(away), 1, 1)), self.batches, self.members)
        else:
            away[~present] = 0.0
            self._sums[0] += batch_sums(present.astype(float), self.batches, self.members)
        square = away * away
        self._sums[1] += batch_sums(away, self.batches, self.members)
        for order, (left, right) in enumerate(((away, away), (away, square), (square, square)), 2):
            self._sums[order] += batch_products(left, right, self.batches, self.members)
        self.members += len(away)

    def _central(self, sums: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """(count, mean, variance, fourth moment) of sums of powers (5, ...)."""
        n = sums[0]
        with np.errstate(invalid="ignore", divide="ignore"):
            shift, second, third, fourth = sums[1:] / n
            variance = np.maximum(second - shift**2, 0.0) * n / (n - 1.0)
        fourth = fourth - 4.0 * shift * third + 6.0 * shift**2 * second - 3.0 * shift**4
        variance = np.where(n > 1, variance, np.nan)
        # what is below rounding of the values themselves is no spread
        assert self._centre is not None
        floor = (8.0 * np.finfo(float).eps * np.abs(self._centre)) ** 2
        return n, shift + self._centre, np.where(variance <= floor, 0.0, variance), fourth

    def _totals(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        if self._sums is None:
            raise ValueError("no members have been added yet")
        return self._central(self._sums.sum(axis=1))

    @property
    def count(self) -> FloatArray:
        """Members present, (T, Q)."""
        return self._totals()[0]

    @property
    def mean(self) -> FloatArray:
        """(T, Q)."""
        return self._totals()[1]

    @property
    def variance(self) -> FloatArray:
        """Unbiased, (T, Q)."""
        return self._totals()[2]

    @property
    def std(self) -> FloatArray:
        """(T, Q)."""
        return np.asarray(np.sqrt(self.variance))

    @property
    def kurtosis(self) -> FloatArray:
        """E(x - mean)^4 / variance^2, (T, Q): 3 for a Gaussian, NaN without spread."""
        _, _, variance, fourth = self._totals()
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.asarray(np.where(variance > 0.0, fourth / variance**2, np.nan))

    @property
    def batch_variance(self) -> FloatArray:
        """Unbiased variance within each batch of members, (B, T, Q)."""
        if self._sums is None:
            raise ValueError("no members have been added yet")
        return self._central(self._sums)[2]

    def mean_interval(self, level: float = LEVEL) -> Interval:
        """Of the mean, (T, Q)."""
        count, mean, variance, _ = self._totals()
        return mean_interval(mean, np.sqrt(variance), count, level)

    def std_interval(self, level: float = LEVEL) -> Interval:
        """Of the standard deviation, (T, Q)."""
        return std_interval(self.std, self.kurtosis, self.count, level)
