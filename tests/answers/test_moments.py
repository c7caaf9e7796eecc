"""Moments and quantiles gathered in blocks equal those of all members at once."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from nipc.answers.batches import batch_sums
from nipc.answers.intervals import quantile_ranks
from nipc.answers.moments import MomentAccumulator
from nipc.answers.quantiles import QuantileAccumulator
from nipc.errors import InputError


@pytest.fixture
def values():
    rng = np.random.default_rng(3)
    values = rng.gamma(3.0, size=(2357, 4, 3))
    values[:, :, 1] = 1e9 + 1e-3 * values[:, :, 1]  # small spread on a large value
    return values


def blocks(values, sizes=(1000, 7, 850, 500)):
    return np.split(values, np.cumsum(sizes)[:-1])


def test_moments_in_blocks(values):
    gathered = MomentAccumulator(batches=30)
    for block in blocks(values):
        gathered.update(block)
    np.testing.assert_allclose(gathered.mean, values.mean(axis=0), rtol=1e-14)
    std = (values - values[0]).std(axis=0, ddof=1)  # 1e9 itself leaves but 7 digits of the spread
    np.testing.assert_allclose(gathered.std, std, rtol=1e-9)
    kurtosis = stats.kurtosis(values - values[0], axis=0, fisher=False)
    np.testing.assert_allclose(gathered.kurtosis, kurtosis, rtol=2e-3)  # 1/n against 1/(n - 1)
    low, high = gathered.std_interval()
    assert np.all((low < std) & (std < high))
    low, high = gathered.mean_interval()
    half = stats.t.ppf(0.975, 2356) * std / np.sqrt(2357)
    np.testing.assert_allclose(0.5 * (high - low)[:, [0, 2]], half[:, [0, 2]], rtol=1e-9)


def test_batches_do_not_depend_on_the_blocks(values):
    gathered = MomentAccumulator(batches=30)
    for block in blocks(values):
        gathered.update(block)
    for b in (0, 7, 29):
        expected = (values - values[0])[b::30].var(axis=0, ddof=1)
        np.testing.assert_allclose(gathered.batch_variance[b], expected, rtol=1e-8)


def test_batch_sums_of_fewer_members_than_batches():
    values = np.arange(5.0)[:, None]
    np.testing.assert_array_equal(batch_sums(values, 8, 6)[:, 0], [2, 3, 4, 0, 0, 0, 0, 1])


def test_missing_members_are_left_out(values):
    values[::3, 2, 0] = np.nan
    values[:, 3, 2] = np.nan
    gathered = MomentAccumulator()
    for block in blocks(values):
        gathered.update(block)
    assert gathered.count[2, 0] == np.isfinite(values[:, 2, 0]).sum()
    assert gathered.mean[2, 0] == pytest.approx(np.nanmean(values[:, 2, 0]), rel=1e-13)
    assert gathered.std[2, 0] == pytest.approx(np.nanstd(values[:, 2, 0], ddof=1), rel=1e-12)
    assert np.isnan(gathered.mean[3, 2])
    assert np.isnan(gathered.std[3, 2])
    assert gathered.std[0, 2] == pytest.approx(values[:, 0, 2].std(ddof=1))


def test_no_spread_is_zero_not_rounding():
    gathered = MomentAccumulator()
    gathered.update(np.full((500, 1, 1), 0.1))
    gathered.update(np.full((500, 1, 1), 0.1))
    assert gathered.std[0, 0] == 0.0
    assert np.isnan(gathered.kurtosis[0, 0])


def test_quantiles_in_blocks(values):
    gathered = QuantileAccumulator()
    for block in blocks(values):
        gathered.update(block)
    levels = (0.025, 0.5, 0.9, 1.0)
    expected = np.quantile(values, levels, axis=0)
    # single precision of the distance from the centre, which is of the order of the spread
    allowed = 1e-6 * values.std(axis=0)
    assert np.all(np.abs(gathered.quantiles(levels) - expected) <= allowed + 3e-7)
    rank_low, rank_high = quantile_ranks(0.5, 2357)
    ordered = np.sort(values[:, 0, 0])
    low, high = gathered.interval(0.5)
    assert low[0, 0] == pytest.approx(ordered[rank_low], rel=1e-6)
    assert high[0, 0] == pytest.approx(ordered[rank_high], rel=1e-6)


def test_quantiles_keep_the_first_members_and_skip_missing_ones(values):
    gathered = QuantileAccumulator(limit=1200)
    values[:1000:2, 1, 0] = np.nan
    values[:, 2, 0] = np.nan
    for block in blocks(values):
        gathered.update(block)
    assert gathered.members == 1200
    median = gathered.quantiles((0.5,))[0]
    assert median[0, 0] == pytest.approx(np.median(values[:1200, 0, 0]), rel=1e-6)
    assert median[1, 0] == pytest.approx(np.nanmedian(values[:1200, 1, 0]), rel=1e-6)
    assert np.isnan(median[2, 0])
    low, _ = gathered.interval(0.5)
    assert np.isnan(low[2, 0])
    few = QuantileAccumulator()
    few.update(values[:20, :1])
    with pytest.raises(InputError, match="needs 119 members; there are 20"):
        few.interval(0.975)


@pytest.mark.parametrize("kind", [MomentAccumulator, QuantileAccumulator])
def test_nothing_added_yet(kind):
    with pytest.raises(ValueError, match="no members"):
        kind().quantiles((0.5,)) if kind is QuantileAccumulator else kind().mean
