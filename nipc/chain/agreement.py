"""Does the ensemble have the right distribution? Paired direct runs tell with few of them.

A member's direct value D and its expansion's P share start and noise, so the mean of D - P and of
(D - m)^2 - (P - m)^2 show how far mean and variance are off without the scatter of either. Where
paths have parted, as in chaos, the pairs tell no more than so many lone runs, and the intervals say
so. The Kolmogorov-Smirnov test sets the direct values against the whole ensemble.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from nipc.arrays import BoolArray, FloatArray
from nipc.chain.check import HeldOut

LEVEL = 0.95
REJECTED = 0.001
"""Probability of the test below which distributions differ: some hundred are looked at."""


@dataclass(frozen=True, eq=False)
class Agreement:
    """What the direct runs say of mean and standard deviation, over the spread: (T, Q) each.

    The true mean is the ensemble's plus `mean` spreads, within mean_low ... mean_high with 95 %;
    the true standard deviation is the ensemble's times 1 + `std`. `p_value` is of the two-sample
    Kolmogorov-Smirnov test. NaN where there are no direct runs, or nothing is spread.
    """

    times: FloatArray
    mean: FloatArray
    mean_low: FloatArray
    mean_high: FloatArray
    std: FloatArray
    std_low: FloatArray
    std_high: FloatArray
    p_value: FloatArray
    unspread: BoolArray

    @classmethod
    def of(cls, held: HeldOut, sample: FloatArray) -> Agreement:
        """Of held-out members and a sample (n, T, Q) of the ensemble."""
        known = np.isfinite(sample)
        count = np.maximum(known.sum(axis=0), 1)
        centre = np.where(known, sample, 0.0).sum(axis=0) / count
        spread = held.spread
        unspread = ~(spread > 0.0)
        scale = np.where(unspread, np.nan, spread)
        direct, predicted = (held.direct - centre) / scale, (held.predicted - centre) / scale
        mean = _interval(direct - predicted)
        # d sigma / sigma = d sigma^2 / (2 sigma^2)
        std = _interval(0.5 * (direct**2 - predicted**2))
        return cls(held.times, *mean, *std, _p_values(held.direct, sample, unspread), unspread)

    def trust_horizon(self, within: float, paths: FloatArray) -> FloatArray:
        """(Q,) last output time up to which the distribution is shown to be right.

        Mean and standard deviation, with their intervals, are off by no more than `within` of the
        spread, and the test does not reject; or single paths agree, up to `paths` (Q,). NaN when
        not even at the first output time.
        """
        worst = np.max(np.abs([self.mean_low, self.mean_high, self.std_low, self.std_high]), axis=0)
        good = (worst <= within) & ~(self.p_value < REJECTED)
        good |= self.unspread | (self.times[:, None] <= np.nan_to_num(paths, nan=-np.inf))
        kept = np.logical_and.accumulate(good, axis=0).sum(axis=0)
        return np.where(kept > 0, self.times[np.maximum(kept - 1, 0)], np.nan)


def _interval(gaps: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean of gaps (C, T, Q) over members, and its ends by Student's t."""
    known = np.isfinite(gaps)
    count = known.sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.where(known, gaps, 0.0).sum(axis=0) / count
        variance = (np.where(known, gaps - mean, 0.0) ** 2).sum(axis=0) / (count - 1)
        factor = stats.t.ppf(0.5 + 0.5 * LEVEL, np.maximum(count - 1, 1))
        half = np.where(count > 1, factor * np.sqrt(variance / count), np.nan)
    return mean, mean - half, mean + half


def _p_values(direct: FloatArray, sample: FloatArray, unspread: BoolArray) -> FloatArray:
    result = np.full(direct.shape[1:], np.nan)
    for place in np.ndindex(result.shape):
        if unspread[place]:
            continue
        ours, theirs = sample[(slice(None), *place)], direct[(slice(None), *place)]
        ours, theirs = ours[np.isfinite(ours)], theirs[np.isfinite(theirs)]
        if ours.size and theirs.size:
            result[place] = stats.ks_2samp(theirs, ours, method="asymp").pvalue
    return result
