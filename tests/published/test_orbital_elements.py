"""Charts of orbits against worked examples, recalled from memory."""

from __future__ import annotations

import numpy as np
import pytest
from pydantic import TypeAdapter
from scipy.optimize import brentq

from nipc.problem.charts import ChartSettings, build_chart
from nipc.problem.charts.kepler import eccentric_anomaly

MU = 398600.4418
SPATIAL = ("x", "y", "z", "vx", "vy", "vz")
UNITS = ("km",) * 3 + ("km/s",) * 3
# Vallado, Fundamentals of Astrodynamics and Applications, example 2-5, from memory:
STATE = np.array([6524.834, 6862.875, 6448.296, 4.901327, 5.533756, -1.976341])
P, A, E, TILT, NODE, PERI, TRUE = 11067.790, 36127.343, 0.832853, 87.870, 227.898, 53.38, 92.335


def elements(start: np.ndarray | None = None, **table: object) -> np.ndarray:
    settings = TypeAdapter(ChartSettings).validate_python({"mu": MU, **table})
    return build_chart(settings, SPATIAL, UNITS, start=start).from_state(STATE, 0.0)


def test_equinoctial_elements_of_the_example():
    n, ex, ey, h, k, mean = elements(name="equinoctial")
    assert np.cbrt(MU / n**2) == pytest.approx(A, rel=1e-6)
    assert np.hypot(ex, ey) == pytest.approx(E, abs=1e-6)
    assert np.degrees(2 * np.arctan(np.hypot(h, k))) == pytest.approx(TILT, abs=1e-3)
    assert np.degrees(np.arctan2(k, h)) % 360 == pytest.approx(NODE, abs=1e-3)
    assert np.degrees(np.arctan2(ey, ex)) % 360 == pytest.approx((NODE + PERI) % 360, abs=6e-3)
    # E from tan(E/2) = sqrt((1-e)/(1+e)) tan(nu/2), then Kepler's equation
    half = np.sqrt((1 - E) / (1 + E)) * np.tan(np.radians(TRUE / 2))
    anomaly = 2 * np.arctan(half)
    expected = anomaly - E * np.sin(anomaly) + np.radians(NODE + PERI)
    assert np.cos(mean - expected) == pytest.approx(1.0, abs=1e-8)


def test_true_longitude_of_the_example():
    p, _, _, _, _, true = elements(name="equinoctial", anomaly="true")
    assert p == pytest.approx(P, rel=1e-6)
    assert np.degrees(true) % 360 == pytest.approx((NODE + PERI + TRUE) % 360, abs=6e-3)


def test_relative_elements_of_the_example():
    """Offsets from a circular orbit of radius 10,000 km, inclined by 60 deg, node at 30 deg."""
    node, tilt, r = np.radians(30.0), np.radians(60.0), 10000.0
    speed = np.sqrt(MU / r)
    nominal = np.array([r * np.cos(node), r * np.sin(node), 0.0, 0, 0, 0])
    nominal[3:] = speed * np.array(
        [-np.sin(node) * np.cos(tilt), np.cos(node) * np.cos(tilt), np.sin(tilt)]
    )
    axis, ex, ey, di, dnode, _ = elements(start=nominal, name="classical_relative")
    assert axis == pytest.approx(A / r - 1.0, rel=1e-6)
    assert ex == pytest.approx(E * np.cos(np.radians(PERI)), abs=1e-4)
    assert ey == pytest.approx(E * np.sin(np.radians(PERI)), abs=1e-4)
    assert np.degrees(di) == pytest.approx(TILT - 60.0, abs=1e-3)
    assert np.degrees(dnode) % 360 == pytest.approx(NODE - 30.0, abs=1e-3)


def test_keplers_equation_worked_example():
    """Vallado, example 2-1, from memory: M = 235.4 deg, e = 0.4 gives E = 220.512074 deg."""
    m = np.radians(np.array([235.4 - 360.0]))
    solved = np.degrees(eccentric_anomaly(m, np.array([0.4])))[0] % 360
    assert solved == pytest.approx(220.512074, abs=1e-6)


def test_keplers_equation_against_a_bracketing_root_finder():
    rng = np.random.default_rng(3)
    e = np.concatenate([rng.uniform(0, 1, 150), 1 - 10.0 ** -rng.uniform(1, 8, 150), [0.0, 0.0]])
    m = np.concatenate([rng.uniform(-np.pi, np.pi, 300), [0.0, np.pi]])
    m[:50] *= 1e-6
    solved = eccentric_anomaly(m, e)
    for one, mean, ecc in zip(solved, m, e, strict=True):
        exact = brentq(lambda x, q=ecc, a=mean: x - q * np.sin(x) - a, -3.2, 3.2, xtol=1e-15)
        # a rounding of M is magnified by dE/dM = 1 / (1 - e cos E)
        allowed = 1e-14 + 4e-16 * (1 + abs(exact)) / (1 - ecc * np.cos(exact))
        assert abs(one - exact) <= allowed
    assert np.isnan(eccentric_anomaly(np.array([1.0]), np.array([np.nan]))).all()
