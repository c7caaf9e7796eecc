"""Diffusion under a fast oscillation: averaged out, then judged."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.slow import SlowSpreading, common_period

TIMES = np.linspace(0.0, 40.0, 401)


@pytest.fixture(scope="module")
def paths():
    """Brownian motion of variance 0.02 t, alone and below an oscillation of random phase."""
    rng = np.random.default_rng(51)
    steps = rng.standard_normal((4000, 400)) * np.sqrt(0.02 * TIMES[1])
    walk = np.concatenate([np.zeros((4000, 1)), steps.cumsum(axis=1)], axis=1)
    phase = rng.uniform(0, 2 * np.pi, (4000, 1))
    fast = 2.0 * np.cos(2 * np.pi * TIMES / 2.5 + phase)
    return np.stack([walk, walk + fast, walk + fast], axis=2)


def gathered(paths, periods):
    slow = SlowSpreading(TIMES, periods)
    for block in np.split(paths, 4):
        slow.update(block)
    return slow


def test_given_and_found_periods(paths):
    slow = gathered(paths, (None, None, 2.5))
    assert slow.used[0] is None
    assert slow.used[1] == pytest.approx(2.5, rel=0.02)
    assert slow.used[2] == 2.5
    for law in slow.laws()[::2]:
        assert law.verdict == "diffusive"
        assert law.exponent.low < 1.0 < law.exponent.high
        assert law.coefficient.value == pytest.approx(0.01, rel=0.08)
    assert slow.laws()[1].verdict == "diffusive"


def test_only_trusted_times_are_used(paths):
    slow = gathered(paths, (None, None, 2.5))
    laws = slow.laws(np.array([0.0, 20.0, 20.0]))
    assert laws[0].verdict == "cannot tell"
    assert laws[1].span[1] + 1.25 <= 20.1
    assert laws[2].span == (pytest.approx(1.3, abs=0.1), pytest.approx(18.7, abs=0.1))


def test_a_period_that_cannot_be_averaged_is_noted(paths):
    slow = gathered(paths, (100.0, None, 0.2))
    assert slow.used[0] is None
    assert slow.used[2] is None
    assert len(slow.notes) == 2
    assert "horizon of 40" in slow.notes[0]
    assert "apart" in slow.notes[1]


def test_members_that_disagree_have_no_common_period():
    periods = np.linspace(1.0, 8.0, 9)[:, None]
    assert common_period(np.cos(2 * np.pi * TIMES / periods), TIMES) is None
    assert common_period(np.cos(2 * np.pi * TIMES / (0 * periods + 3.0)), TIMES) is not None


def test_an_oscillation_that_spreads_is_judged_by_its_variance():
    """x'' + W^2 x = s dW/dt: Var x = s^2 (t / 2 W^2 - sin(2 W t) / 4 W^3), D = s^2 / 4 W^2; its
    mean over a period hardly spreads.
    """
    rng = np.random.default_rng(52)
    w, h, s = 2 * np.pi / 2.5, TIMES[1], 0.3
    # exact: rotation, and the step's noise by its covariance
    c, d = np.cos(w * h), np.sin(w * h)
    xx = (h / 2 - np.sin(2 * w * h) / (4 * w)) / w**2
    vv, xv = h / 2 + np.sin(2 * w * h) / (4 * w), d**2 / (2 * w**2)
    factor = np.linalg.cholesky(s**2 * np.array([[xx, xv], [xv, vv]]))
    state, values = np.zeros((2, 4000)), np.zeros((4000, TIMES.size, 1))
    for k in range(1, TIMES.size):
        state = np.array([[c, d / w], [-w * d, c]]) @ state
        state += factor @ rng.standard_normal((2, 4000))
        values[:, k, 0] = state[0]
    for period in (2.5, None):
        slow = SlowSpreading(TIMES, (period,))
        slow.update(values)
        law = slow.laws()[0]
        assert slow.amplitude == [True]
        assert law.verdict == "diffusive"
        assert law.exponent.low < 1.0 < law.exponent.high
        assert law.coefficient.low < s**2 / (4 * w**2) < law.coefficient.high
        assert slow.used[0] == pytest.approx(2.5, rel=0.02)
        assert slow.subjects("s")[0].startswith("an oscillation of period 2.")


def test_one_that_is_not_slow_is_judged_as_it_is(paths):
    slow = gathered(paths, (0.0, 0.0, None))
    assert slow.used[:2] == (None, None)
    assert slow.subjects("s")[:2] == ["", ""]
    assert slow.subjects("s")[2].startswith("averaged over its period of 2.")


def test_the_hint_to_average_is_given_where_it_was_not_done(paths):
    turning = (1.0 + 0.9 * np.sin(2 * np.pi * TIMES / 2.5)) * paths[:, -1:, 0]
    values = np.repeat(turning[:, :, None], 2, axis=2)
    slow = gathered(values, (0.0, 3.3))
    plain, averaged = slow.laws()
    assert "to be averaged over its period" in plain.reason
    assert "to be averaged" not in averaged.reason
