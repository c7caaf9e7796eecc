"""The slot watch's dynamics against what handbooks tell of the geostationary belt.

Values from memory, after Soop 1994, Handbook of Geostationary Orbits: radius 42164.2 km, stable
points near 75.1 E and 105.3 W, an acceleration of the mean longitude of at most 1.7e-3 deg/day^2.
With J22 alone the stable points are exactly 90 degrees from its axis; higher terms move them by
some tenths of a degree.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

EXAMPLE = Path(__file__).parents[2] / "examples" / "slot_watch" / "dynamics.py"
SOOP = "Soop 1994, Handbook of Geostationary Orbits (from memory)"
HOME = 19.07  # degrees east of the example's satellite at t = 0


@pytest.fixture(scope="module")
def dynamics():
    spec = importlib.util.spec_from_file_location("slot_watch_dynamics", EXAMPLE)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def acceleration(dynamics, longitudes: np.ndarray) -> np.ndarray:
    """Mean-longitude acceleration in degrees a day^2 of satellites at rest there.

    Five days by Runge-Kutta; a daily libration averages out of whole days.
    """
    radius = synchronous_radius(dynamics)
    angle = np.deg2rad(longitudes - HOME)
    speed = radius * dynamics.OMEGA
    c, s = np.cos(angle), np.sin(angle)
    x = np.stack([radius * c, radius * s, -speed * s, speed * c], axis=1)
    still, h, steps = np.zeros((x.shape[0], 2)), 0.005, 1000
    east, days = [np.zeros(x.shape[0])], [0.0]
    for k in range(steps):
        t = k * h
        k1 = dynamics.rates(t, x, still, None)
        k2 = dynamics.rates(t + h / 2, x + h / 2 * k1, still, None)
        k3 = dynamics.rates(t + h / 2, x + h / 2 * k2, still, None)
        k4 = dynamics.rates(t + h, x + h * k3, still, None)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        turned = (x[:, 0] + 1j * x[:, 1]) * np.exp(-1j * dynamics.OMEGA * 86400 * (t + h))
        east.append(np.rad2deg(np.angle(turned * np.exp(-1j * angle))))
        days.append(t + h)
    return 2.0 * np.polyfit(days, np.array(east), 2)[0]


def synchronous_radius(dynamics) -> float:
    """r with MU / r^3 (1 + 1.5 J2 (RADIUS / r)^2) = OMEGA^2."""
    r = 42164.0
    for _ in range(50):
        r = (dynamics.MU * (1 + 1.5 * dynamics.J2 * (dynamics.RADIUS / r) ** 2)
             / dynamics.OMEGA**2) ** (1 / 3)  # fmt: skip
    return r


def test_radius(dynamics, published):
    kepler = (dynamics.MU / dynamics.OMEGA**2) ** (1 / 3)
    published("geostationary radius, km", kepler, 42164.2, source=SOOP, abs=0.1)
    # the oblateness moves it by J2 / 2 (RADIUS / r)^2 of it
    moved = synchronous_radius(dynamics) - kepler
    published(
        "what J2 adds to it, km", moved, 0.5 * dynamics.J2 * dynamics.RADIUS**2 / kepler,
        source="first-order perturbation, common practice, no source", rel=0.01,
    )  # fmt: skip


def test_points_of_rest(dynamics, published):
    grid = np.array([74.0, 76.2, 253.9, 256.1])
    a = acceleration(dynamics, grid)
    zeros = [
        grid[i] - a[i] * (grid[i + 1] - grid[i]) / (a[i + 1] - a[i]) for i in (0, 2)
    ]  # fmt: skip
    # stable: pushed back from either side
    assert np.all(a[[0, 2]] > 0)
    assert np.all(a[[1, 3]] < 0)
    published("stable points, degrees east", zeros, [75.1, 254.7], source=SOOP, abs=0.5)


def test_largest_drift_acceleration(dynamics, published):
    between = acceleration(dynamics, np.array([30.07, 120.07]))
    published(
        "largest acceleration of the longitude, deg/day^2", np.abs(between), 1.7e-3,
        source=SOOP, rel=0.05,
    )  # fmt: skip
