"""95 % intervals of what an ensemble of n members tells: shares, means, spreads, quantiles."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import stats

from nipc.arrays import FloatArray
from nipc.errors import InputError

LEVEL = 0.95


class Interval(NamedTuple):
    """Ends of an interval, arrays of one shape."""

    low: FloatArray
    high: FloatArray


def normal_factor(level: float = LEVEL) -> float:
    """z with P(|N(0, 1)| <= z) = level."""
    return float(stats.norm.ppf(0.5 + 0.5 * level))


def wilson(share: FloatArray, n: FloatArray, level: float = LEVEL) -> Interval:
    """Wilson's score interval of a probability seen as a share of n trials; NaN where n = 0.

    Wilson 1927; the choice for n >= 40 of Brown, Cai & DasGupta 2001. n may be an effective number.
    """
    z = normal_factor(level)
    with np.errstate(invalid="ignore", divide="ignore"):
        n = np.where(np.asarray(n) > 0, n, np.nan)
        size = 1.0 + z**2 / n
        centre = (share + z**2 / (2.0 * n)) / size
        half = z / size * np.sqrt(share * (1.0 - share) / n + z**2 / (4.0 * n**2))
    low = np.where(share <= 0.0, 0.0, centre - half)
    high = np.where(share >= 1.0, 1.0, centre + half)
    missing = ~np.isfinite(n) | np.isnan(share)
    return Interval(np.where(missing, np.nan, low), np.where(missing, np.nan, high))


def clopper_pearson(count: FloatArray, n: FloatArray, level: float = LEVEL) -> Interval:
    """The interval of a probability that never covers too little (Clopper & Pearson 1934)."""
    count, n = np.broadcast_arrays(np.asarray(count, float), np.asarray(n, float))
    tail = 0.5 * (1.0 - level)
    low, high = np.zeros(count.shape), np.ones(count.shape)
    some, most = count > 0, count < n
    low[some] = stats.beta.ppf(tail, count[some], n[some] - count[some] + 1.0)
    high[most] = stats.beta.ppf(1.0 - tail, count[most] + 1.0, n[most] - count[most])
    return Interval(low, high)


def mean_interval(
    mean: FloatArray, std: FloatArray, n: FloatArray, level: float = LEVEL
) -> Interval:
    """mean +- t std / sqrt(n), Student's t with n - 1 degrees of freedom; NaN where n < 2."""
    n = np.asarray(n, float)
    with np.errstate(invalid="ignore", divide="ignore"):
        t = stats.t.ppf(0.5 + 0.5 * level, np.where(n > 1, n - 1.0, np.nan))
        half = t * std / np.sqrt(n)
    return Interval(mean - half, mean + half)


def std_interval(
    std: FloatArray, kurtosis: FloatArray, n: FloatArray, level: float = LEVEL
) -> Interval:
    """Interval of a standard deviation, of any kurtosis E(x - mean)^4 / std^4 (Bonett 2006).

    ln std^2 +- z sqrt((kurtosis - (n - 3)/n) / (n - 1)) with a factor n / (n - z) for small n;
    NaN where n < 5.
    """
    z = normal_factor(level)
    n = np.where(np.asarray(n) >= 5, n, np.nan).astype(float)
    with np.errstate(invalid="ignore", divide="ignore"):
        small = n / (n - z)
        error = small * np.sqrt(np.maximum(kurtosis - (n - 3.0) / n, 0.0) / (n - 1.0))
        half = 0.5 * z * error
        middle = std * np.sqrt(small)
    return Interval(
        np.where(std == 0.0, 0.0, middle * np.exp(-half)),
        np.where(std == 0.0, 0.0, middle * np.exp(half)),
    )


def quantile_ranks(q: float, n: int, level: float = LEVEL) -> tuple[int, int]:
    """0-based ranks l, u of n sorted values with P(x_l <= quantile q <= x_u) >= level.

    Distribution-free, from the binomial law of the number below (David & Nagaraja 2003, sec. 7.1).
    Raises InputError when n is too small for any pair to reach the level.
    """
    needed = members_needed(q, level)
    if n < needed:
        raise InputError(
            f"a {100 * level:g} % interval of the {q:g} quantile needs {needed} members;"
            f" there are {n}"
        )
    tail = 0.5 * (1.0 - level)
    low = int(stats.binom.ppf(tail, n, q)) - 1
    high = int(stats.binom.ppf(1.0 - tail, n, q))
    # at an end of the sample one side's tail is given to the other
    low, high = max(low, 0), min(high, n - 1)
    while _coverage(low, high, q, n) < level and (low > 0 or high < n - 1):
        low, high = max(low - 1, 0), min(high + 1, n - 1)
    return low, high


def _coverage(low: int, high: int, q: float, n: int) -> float:
    return float(stats.binom.cdf(high, n, q) - stats.binom.cdf(low, n, q))


def members_needed(q: float, level: float = LEVEL) -> int:
    """Least n at which the smallest and largest of n values enclose quantile q at the level."""
    n = int(np.ceil(np.log1p(-level) / np.log(max(q, 1.0 - q))))
    while 1.0 - q**n - (1.0 - q) ** n < level:
        n += 1
    return n


def widen(interval: Interval, centre: FloatArray, error: FloatArray | float) -> Interval:
    """Each half-width and `error` (a 95 % half-width of independent origin) added in quadrature."""
    low = centre - np.hypot(centre - interval.low, error)
    return Interval(low, centre + np.hypot(interval.high - centre, error))
