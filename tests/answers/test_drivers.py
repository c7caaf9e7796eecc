"""Pick-and-freeze shares: gathered, missing members, indicators, no variance."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.boxes import Box, inside_indicator
from nipc.answers.drivers import PickFreezeAccumulator


def model(z: np.ndarray) -> np.ndarray:
    """(n, 4) to (n, T = 2, Q = 2): a sum and a product of three groups {0, 1}, {2}, {3}."""
    first, second, third = z[:, 0] + 2 * z[:, 1], 3 * z[:, 2], z[:, 3]
    additive = np.stack([first + second, first + 0.1 * second + 1000.0], axis=1)
    product = np.stack([(1 + z[:, 0]) * (1 + z[:, 2]), first * third], axis=1)
    return np.stack([additive, product], axis=2)


GROUPS = {"noise": [0, 1], "start": [2], "drag": [3]}
# additive: variances 5 and 9, then 5 and 0.09. Product (1 + a)(1 + b): variance 3, of which a and b
# have 1 each alone. Product a b with variances 5 and 1: no first share, total 1 each.
FIRST = np.array([
    [[5 / 14, 1 / 3], [5 / 5.09, 0.0]],
    [[9 / 14, 1 / 3], [0.09 / 5.09, 0.0]],
    [[0.0, 0.0], [0.0, 0.0]],
])  # fmt: skip
TOTAL = np.array([
    [[5 / 14, 2 / 3], [5 / 5.09, 1.0]],
    [[9 / 14, 2 / 3], [0.09 / 5.09, 0.0]],
    [[0.0, 0.0], [0.0, 1.0]],
])  # fmt: skip


def gather(n, seed, function=model, block=2000, spoil=None):
    rng = np.random.default_rng(seed)
    counts = PickFreezeAccumulator(GROUPS)
    for _ in range(n // block):
        a, b = rng.standard_normal((2, block, 4))

        def mixed(columns, a=a, b=b):
            frozen = a.copy()
            frozen[:, columns] = b[:, columns]
            return function(frozen)

        runs = [function(a), function(b)]
        if spoil is not None:
            spoil(runs)
        counts.update(runs[0], runs[1], (mixed(columns) for columns in GROUPS.values()))
    return counts.result()


def test_sums_and_products_by_group():
    """Each of 24 shares within 4.5 standard errors: a false alarm once in some 6,000 seeds."""
    shares = gather(40_000, 1)
    for value, interval, exact in (
        (shares.first, shares.first_interval, FIRST),
        (shares.total, shares.total_interval, TOTAL),
    ):
        error = (interval.high - interval.low) / (2 * 1.96)
        assert np.all(np.abs(value - exact) <= 4.5 * error + 1e-12)
        assert np.all(error < 0.02)
    assert not shares.undefined.any()
    np.testing.assert_allclose(shares.interaction[0, 1], 1 / 3, atol=0.05)
    # a group that does nothing is known to do nothing, exactly
    assert shares.total[2, 0, 0] == shares.first[2, 0, 0] == 0.0


def test_intervals_cover():
    """60 ensembles x 24 shares, of which 4 are zero exactly and always hit: 0.95 +- 0.03."""
    hits = []
    for seed in range(60):
        shares = gather(2000, 100 + seed, block=1000)
        for interval, exact in ((shares.first_interval, FIRST), (shares.total_interval, TOTAL)):
            hits.append((interval.low <= exact + 1e-12) & (exact - 1e-12 <= interval.high))
    assert 0.92 <= np.mean(hits) <= 0.98


def test_weak_groups_are_sharper_than_by_correlation_alone():
    """The weak group's first share of 0.018: correlation alone would have an error of 1/sqrt(n)."""
    shares = gather(10_000, 2)
    low, high = shares.first_interval
    assert (high - low)[1, 1, 0] / (2 * 1.96) < 0.5 / np.sqrt(10_000)


def test_missing_members_are_left_out():
    def spoil(runs):
        runs[0][::7, 0, 0] = np.nan
        runs[1][::5, 0, 0] = np.nan

    shares = gather(20_000, 3, spoil=spoil)
    clean = gather(20_000, 3)
    np.testing.assert_allclose(shares.total[:, 0, 0], TOTAL[:, 0, 0], atol=0.03)
    np.testing.assert_allclose(shares.total[:, 1], clean.total[:, 1], rtol=1e-9, atol=1e-12)
    assert shares.total[0, 0, 0] != clean.total[0, 0, 0]


def test_no_variance_is_undefined_and_said_so():
    shares = gather(4000, 4, function=lambda z: 1e6 + 0.0 * model(z))
    assert shares.undefined.all()
    assert np.isnan(shares.first).all()
    assert np.isnan(shares.total_interval.high).all()
    assert np.all(shares.variance == 0.0)


def test_shares_of_being_inside():
    """P(|z_0 + z_2| <= 1) by two equal groups: shares equal; total above first, by quadrature.

    Var E(I | z_0) = int (Phi(1 - z) - Phi(-1 - z))^2 phi dz - P^2.
    """
    from scipy import integrate, stats

    p = stats.norm.cdf(1 / np.sqrt(2)) - stats.norm.cdf(-1 / np.sqrt(2))
    square = integrate.quad(
        lambda z: (stats.norm.cdf(1 - z) - stats.norm.cdf(-1 - z)) ** 2 * stats.norm.pdf(z), -8, 8
    )[0]
    first = (square - p**2) / (p * (1 - p))
    box = Box.single("sum", 0, -1.0, 1.0)

    def indicator(z):
        values = (z[:, 0] + z[:, 2])[:, None, None]
        return inside_indicator(values, np.zeros(1), box)[..., None]

    shares = gather(40_000, 5, function=indicator)
    for g in (0, 1):
        assert shares.first[g, 0, 0] == pytest.approx(first, abs=0.02)
        assert shares.total[g, 0, 0] == pytest.approx(1 - first, abs=0.02)
    assert shares.variance[0, 0] == pytest.approx(p * (1 - p), abs=0.005)


def test_wrong_number_of_groups():
    counts = PickFreezeAccumulator(["one", "two"])
    with pytest.raises(ValueError, match="zip"):
        counts.update(np.zeros((3, 1, 1)), np.zeros((3, 1, 1)), [np.zeros((3, 1, 1))])
