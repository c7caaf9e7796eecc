"""The largest scale that keeps the box."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from nipc.answers.allowance import Probability, find_allowance
from nipc.answers.intervals import wilson


def members(n=20_000, seed=1):
    return np.random.default_rng(seed).standard_normal(n)


def inside(sample, half=2.0, fixed=0.0):
    """P(|fixed y + s z| <= half) over the same members at every s."""
    other = fixed * members(sample.size, 9)

    def probability(scale):
        share = np.mean(np.abs(other + scale * sample) <= half)
        low, high = wilson(np.array(share), np.array(float(sample.size)))
        return Probability(float(share), float(low), float(high))

    return probability


def test_against_the_closed_form():
    """P(|s z| <= 2) = 0.95 at s = 2 / 1.95996; the ends of the interval likewise."""
    found = find_allowance(inside(members()), 0.95)
    exact = 2.0 / stats.norm.ppf(0.975)
    assert found.low < exact < found.high
    assert found.scale == pytest.approx(exact, rel=0.02)
    assert found.low < found.scale < found.high
    assert found.reason is None
    assert not found.beyond
    assert found.monotone
    keeps = np.abs(members() * found.scale) <= 2.0
    assert keeps.mean() == pytest.approx(0.95, abs=2e-3)


def test_few_evaluations():
    asked = []

    def counting(scale):
        asked.append(scale)
        return inside(members())(scale)

    find_allowance(counting, 0.95)
    assert len(asked) == len(set(asked))
    assert len(asked) <= 30


def test_unreachable_target_is_said_with_the_range():
    found = find_allowance(inside(members(), fixed=2.0), 0.95)
    assert np.isnan(found.scale)
    assert found.reason is not None
    assert "even at scale zero, below the target 0.95" in found.reason
    at_zero = np.mean(np.abs(2.0 * members(20_000, 9)) <= 2.0)
    assert found.reachable[1] == pytest.approx(at_zero, abs=1e-12)
    assert f"{at_zero:.4g}" in found.reason


def test_a_box_kept_at_every_scale():
    found = find_allowance(inside(members(), half=100.0), 0.95, limit=4.0)
    assert found.beyond
    assert found.scale == found.low == found.high == 4.0
    assert found.reason is not None
    assert "largest scale allowed, 4" in found.reason


def test_rise_and_fall_takes_the_first_crossing_and_says_so():
    def probability(scale):
        p = 0.9 if 1.5 < scale < 3.0 else 0.99
        return Probability(p, p, p)

    found = find_allowance(probability, 0.95)
    assert found.scale == pytest.approx(1.5, rel=2e-3)
    assert not found.monotone


def test_only_the_low_end_misses_at_zero():
    def probability(scale):
        p = 0.96 - 0.01 * scale
        return Probability(p, p - 0.03, p + 0.03)

    found = find_allowance(probability, 0.95)
    assert found.low == 0.0
    assert found.scale == pytest.approx(1.0, rel=1e-2)
    assert found.high == pytest.approx(4.0, rel=1e-2)
