"""Intervals against scipy's, against tables, and by their coverage."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from nipc.answers.intervals import (
    Interval,
    clopper_pearson,
    mean_interval,
    members_needed,
    quantile_ranks,
    std_interval,
    widen,
    wilson,
)
from nipc.errors import InputError


@pytest.mark.parametrize(("count", "n"), [(0, 10), (3, 10), (10, 10), (57, 1000), (999, 1000)])
@pytest.mark.parametrize("level", [0.9, 0.95, 0.999])
def test_probabilities_against_scipy(count, n, level):
    test = stats.binomtest(count, n)
    for method, interval in (
        ("wilson", wilson(np.array(count / n), np.array(float(n)), level)),
        ("exact", clopper_pearson(np.array(count), np.array(n), level)),
    ):
        theirs = test.proportion_ci(level, method=method)
        np.testing.assert_allclose(interval, [theirs.low, theirs.high], atol=1e-12)


def test_no_trials_tell_nothing():
    low, high = wilson(np.array([np.nan, 0.5]), np.array([0.0, 10.0]))
    assert np.isnan([low[0], high[0]]).all()
    assert 0 < low[1] < 0.5 < high[1] < 1


def test_mean_interval_against_scipy():
    sample = np.random.default_rng(1).normal(3.0, 2.0, 25)
    theirs = stats.ttest_1samp(sample, 0.0).confidence_interval(0.95)
    ours = mean_interval(sample.mean(), sample.std(ddof=1), np.array(25))
    np.testing.assert_allclose(ours, [theirs.low, theirs.high], rtol=1e-12)
    assert np.isnan(mean_interval(np.array(1.0), np.array(0.0), np.array(1))).all()


@pytest.mark.parametrize(
    ("draw", "true"),
    [
        (lambda rng, shape: rng.standard_normal(shape), 1.0),
        (lambda rng, shape: rng.uniform(-1, 1, shape), 1 / np.sqrt(3)),
        (lambda rng, shape: rng.exponential(1.0, shape), 1.0),
        (lambda rng, shape: rng.standard_t(12, shape), np.sqrt(1.2)),
    ],
)
def test_std_interval_covers_whatever_the_kurtosis(draw, true):
    """1,000 samples of 1,000: coverage 0.95, up to 4 sigma of 0.007 and 0.015 of the method."""
    sample = draw(np.random.default_rng(2), (1000, 1000))
    std = sample.std(axis=1, ddof=1)
    kurtosis = stats.kurtosis(sample, axis=1, fisher=False)
    low, high = std_interval(std, kurtosis, np.full(1000, 1000))
    covered = np.mean((low <= true) & (true <= high))
    assert 0.907 <= covered <= 0.978
    # an interval for a Gaussian would be wrong for the others by this factor in width
    gauss = stats.chi2.ppf([0.975, 0.025], 999)
    width = np.mean(high - low) / np.mean(std * (np.sqrt(999 / gauss[1]) - np.sqrt(999 / gauss[0])))
    assert width == pytest.approx(np.sqrt((np.mean(kurtosis) - 1) / 2), rel=0.02)


def test_std_interval_without_spread_and_with_few():
    low, high = std_interval(np.array([0.0, 1.0]), np.array([np.nan, 3.0]), np.array([100, 4]))
    assert low[0] == high[0] == 0.0
    assert np.isnan(low[1])


def test_quantile_ranks_of_the_median_table():
    """Ranks for the median at 95 %, from memory of a common table: n = 100, 40th and 61st value."""
    assert quantile_ranks(0.5, 100) == (39, 60)
    assert quantile_ranks(0.5, 10) == (1, 8)  # 2nd and 9th, coverage 0.979
    assert quantile_ranks(0.5, 6) == (0, 5)


@pytest.mark.parametrize("q", [0.025, 0.25, 0.5, 0.975])
@pytest.mark.parametrize("n", [150, 1000, 20001])
def test_quantile_ranks_cover(q, n):
    low, high = quantile_ranks(q, n)
    below = stats.binom(n, q)
    assert below.cdf(high) - below.cdf(low) >= 0.95
    assert below.cdf(high - 1) - below.cdf(low + 1) < 0.95  # no narrower


def test_too_few_members_are_refused_with_the_number_needed():
    """59 values for 95 % of the 0.95 quantile: Wilks 1941, a number every analyst knows."""
    assert members_needed(0.95) == 59
    assert members_needed(0.5) == 6
    with pytest.raises(InputError, match=r"0\.95 quantile needs 59 members; there are 58"):
        quantile_ranks(0.95, 58)


def test_widen_adds_in_quadrature():
    low, high = widen(Interval(np.array(7.0), np.array(14.0)), np.array(10.0), 4.0)
    assert low == 5.0
    assert high == pytest.approx(10 + np.sqrt(32))
