"""First exit from a box against closed forms: Brownian motion, and escape over a barrier."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate

from nipc.answers.boxes import Box
from nipc.answers.confinement import ConfinementAccumulator
from nipc.answers.monitoring import continuous_box, roughness

HALF, SIGMA = 1.0, 0.8


def series(times, half):
    """S(t) = 4/pi sum (-1)^k / (2k+1) exp(-(2k+1)^2 pi^2 sigma^2 t / 8 a^2), from the middle.

    Redner, A Guide to First-Passage Processes, 2001; Feller vol. II, chapter X.
    """
    k = np.arange(200)[:, None]
    decay = np.exp(-((2 * k + 1) ** 2) * np.pi**2 * SIGMA**2 * times / (8 * half**2))
    return 4 / np.pi * np.sum((-1.0) ** k / (2 * k + 1) * decay, axis=0)


@pytest.fixture(scope="module")
def seen():
    """60,000 Brownian paths seen at 51 times, boxes |x| <= a as given and as narrowed."""
    rng = np.random.default_rng(21)
    times = np.linspace(0.0, 2.0, 51)
    box = Box.single("x", 0, -HALF, HALF)
    narrow = continuous_box(box, np.array([SIGMA]), times[1])
    counts = ConfinementAccumulator(times, [box, narrow])
    for _ in range(6):
        steps = rng.standard_normal((10_000, 50, 1)) * SIGMA * np.sqrt(times[1])
        walk = np.concatenate([np.zeros((10_000, 1, 1)), steps.cumsum(axis=1)], axis=1)
        counts.update(walk)
    assert roughness(walk, times).rate[0] == pytest.approx(SIGMA, rel=0.01)
    return counts.result()


def test_looked_at_now_and_then(seen):
    """Survival of the discrete walk is the series with the box widened by 0.5826 sigma sqrt(dt).

    Broadie, Glasserman & Kou 1997. To the step's order: beyond 4 standard errors, 0.003 is allowed.
    """
    wide = HALF + 0.5826 * SIGMA * np.sqrt(seen.times[1])
    exact = series(seen.times[5:], wide)
    error = np.sqrt(exact * (1 - exact) / 60_000)
    assert np.all(np.abs(seen.survival[0, 5:] - exact) <= 4 * error + 0.003)
    # without the shift it is far off: this check can fail
    assert np.abs(seen.survival[0, 25] - series(seen.times[25:26], HALF))[0] > 0.05


def test_the_narrowed_box_tells_what_is_left_without_a_break(seen):
    exact = series(seen.times[10:], HALF)
    error = np.sqrt(exact * (1 - exact) / 60_000)
    assert np.all(np.abs(seen.survival[1, 10:] - exact) <= 4 * error + 0.004)


def test_exit_times(seen):
    """The median exit time, by the series of the narrowed box's survival, to one output step."""
    fine = np.linspace(0.01, 2.0, 4000)
    median = fine[np.argmax(series(fine, HALF) <= 0.5)]
    quantile, interval = seen.exit_quantiles((0.5,))
    assert median - 1e-9 <= quantile[0, 1] <= median + 1.5 * seen.times[1]
    assert interval.low[0, 1] <= quantile[0, 1] <= interval.high[0, 1]


def test_escape_over_a_barrier():
    """dx = (x - x^3) dt + sqrt(2 D) dW from -1, with a barrier of 1/4 = 4 D.

    Kramers 1940: rate sqrt(V''(-1) |V''(0)|) / 2 pi exp(-barrier / D), here sqrt(2) / 2 pi e^-4;
    Haenggi, Talkner & Borkovec 1990 give it to O(D / barrier), so 20 % is allowed. The mean passage
    time by quadrature (the same review, section VII) is met within 4 standard errors and 2 %.
    """
    noise, step, members, seen_every = 1 / 16, 0.02, 3000, 50
    rng = np.random.default_rng(22)
    x = np.full(members, -1.0)
    times = np.arange(0.0, 401.0)
    values = np.empty((members, times.size, 1))
    values[:, 0, 0] = x
    for k in range(1, times.size):
        for _ in range(seen_every):
            kick = np.sqrt(2 * noise * step) * rng.standard_normal(members)
            middle = x + 0.5 * ((x - x**3) * step + kick)  # midpoint: second order in the drift
            x = x + (middle - middle**3) * step + kick
        values[:, k, 0] = x
    # well on the other side, so that turning back does not count as leaving
    counts = ConfinementAccumulator(times, [Box.single("x", 0, -np.inf, 0.8)])
    counts.update(values)
    survival = counts.result().survival[0]
    first, last = 30, 400
    left = survival[first] - survival[last]
    rate = np.log(survival[first] / survival[last]) / (times[last] - times[first])

    kramers = np.sqrt(2) / (2 * np.pi) * np.exp(-4.0)
    assert rate == pytest.approx(kramers, rel=0.2)

    def potential(y):
        return y**4 / 4 - y**2 / 2

    def inner(y):
        return integrate.quad(lambda z: np.exp(-potential(z) / noise), -4, y)[0]

    outer = integrate.quad(lambda y: np.exp(potential(y) / noise) * inner(y), -1.0, 0.8)[0]
    passage = outer / noise
    assert abs(rate * passage - 1) <= 4 / np.sqrt(members * left) + 0.02
