"""Paired direct runs tell whether the ensemble's distribution is right."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.chain.agreement import Agreement
from nipc.chain.check import HeldOut

TIMES = np.arange(4.0)


def held(error: float, scale: float, shift: float, members: int = 12) -> HeldOut:
    """Direct = scale x predicted + shift + error x noise, one quantity of unit spread."""
    rng = np.random.default_rng(3)
    predicted = rng.standard_normal((members, 4, 1))
    direct = scale * predicted + shift + error * rng.standard_normal((members, 4, 1))
    return HeldOut(TIMES, direct, predicted, np.ones((4, 1)))


SAMPLE = np.random.default_rng(4).standard_normal((4000, 4, 1))
NO_PATHS = np.array([np.nan])


def test_few_pairs_show_a_small_error():
    found = Agreement.of(held(0.01, 1.0, 0.0), SAMPLE)
    # half-width t(11) x 0.01 / sqrt(12) = 0.006: well below five hundredths
    assert found.mean_high - found.mean_low == pytest.approx(0.0127, rel=0.6)
    assert found.trust_horizon(0.05, NO_PATHS) == [3.0]
    assert np.isnan(found.trust_horizon(0.002, NO_PATHS))[0]


def test_a_shift_and_a_wider_spread_are_seen():
    shifted = Agreement.of(held(0.001, 1.0, 0.3), SAMPLE)
    assert shifted.mean == pytest.approx(np.full((4, 1), 0.3), abs=0.003)
    assert np.isnan(shifted.trust_horizon(0.05, NO_PATHS))[0]
    wide = Agreement.of(held(0.0, 1.3, 0.0, 400), SAMPLE)
    # sigma^2 is up by 0.69, so that half of it is 0.345; 400 pairs know it to 0.345 sqrt(2 / 400)
    assert wide.std == pytest.approx(np.full((4, 1), 0.345), abs=4.5 * 0.345 * np.sqrt(2 / 400))


def test_paths_that_have_parted_tell_little():
    """The pairs are independent: the distribution is right, and twelve runs cannot show it."""
    rng = np.random.default_rng(5)
    apart = rng.standard_normal((2, 12, 4, 1))
    found = Agreement.of(HeldOut(TIMES, apart[0], apart[1], np.ones((4, 1))), SAMPLE)
    assert np.all(found.mean_high - found.mean_low > 0.5)
    assert np.isnan(found.trust_horizon(0.05, NO_PATHS))[0]
    assert np.all(found.p_value > 0.001)


def test_trust_in_paths_is_trust_in_the_distribution():
    found = Agreement.of(held(0.001, 1.0, 0.3), SAMPLE)
    assert found.trust_horizon(0.05, np.array([2.0])) == [2.0]


def test_another_distribution_is_rejected():
    rng = np.random.default_rng(6)
    two = np.where(rng.random((200, 4, 1)) < 0.5, -1.0, 1.0)  # unit spread, not normal
    found = Agreement.of(HeldOut(TIMES, two, two, np.ones((4, 1))), SAMPLE)
    assert np.all(found.p_value < 1e-6)
    assert np.isnan(found.trust_horizon(0.05, NO_PATHS))[0]
