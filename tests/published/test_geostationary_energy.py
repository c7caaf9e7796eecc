"""Energy of a geostationary orbit under white accelerations spreads as the square root of time.

Common practice, no source: dE/dt = v . a, so that with v nearly constant in the orbit's own axes
Var E = (v s)^2 t for a tangential noise s; here v = 3.0747 km/s and s = 3e-9 km/s^1.5.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from nipc.answers.slow import SlowSpreading

EXAMPLE = Path(__file__).parents[2] / "examples" / "slot_watch" / "dynamics.py"
DAYS, STEP, EVERY = 12.0, 0.0125, 16


@pytest.fixture(scope="module")
def energies():
    """Energy (n, T, 1) of the slot watch's dynamics from a certain start, and times in days."""
    spec = importlib.util.spec_from_file_location("slot_watch_dynamics", EXAMPLE)
    dynamics = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(dynamics)
    n, rng = 1500, np.random.default_rng(45)
    x = np.tile([42164.7, 0.0, 0.0, 3.0747612], (n, 1))
    size = np.array([2e-8, 3e-9]) / np.sqrt(STEP * 86400.0)

    def energy(x):
        radius = np.hypot(x[:, 0], x[:, 1])
        return 0.5 * (x[:, 2] ** 2 + x[:, 3] ** 2) - dynamics.MU / radius

    values, times = [energy(x)], [0.0]
    for k in range(round(DAYS / STEP)):
        xi, t, h = size * rng.standard_normal((n, 2)), k * STEP, STEP
        k1 = dynamics.rates(t, x, xi, None)
        k2 = dynamics.rates(t + h / 2, x + h / 2 * k1, xi, None)
        k3 = dynamics.rates(t + h / 2, x + h / 2 * k2, xi, None)
        k4 = dynamics.rates(t + h, x + h * k3, xi, None)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        if (k + 1) % EVERY == 0:
            values.append(energy(x))
            times.append((k + 1) * STEP)
    return np.stack(values, axis=1)[:, :, None], np.array(times)


def test_standard_deviation_grows_as_the_square_root_of_time(energies):
    values, times = energies
    slow = SlowSpreading(times, (1.0,))
    slow.update(values)
    law = slow.laws()[0]
    assert law.verdict == "diffusive"
    low, high = 0.5 * law.exponent.low, 0.5 * law.exponent.high
    assert low <= 0.5 <= high
    assert high - low < 0.15
    # 2 D = (v s)^2 per second; 1,500 members know a variance to 2 sqrt(2 / 1500) = 7 %
    exact = 0.5 * (3.0747 * 3e-9) ** 2 * 86400.0
    assert law.coefficient.value == pytest.approx(exact, rel=0.1)
