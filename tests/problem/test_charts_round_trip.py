"""Every chart and back, over wide random states: 1e-12 relative.

Relative means: of the length of the position vector and of the velocity vector.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import TypeAdapter

from nipc.problem.charts import Chart, ChartSettings, build_chart

PLANAR = ("x", "y", "vx", "vy")
SPATIAL = ("x", "y", "z", "vx", "vy", "vz")
UNITS = {4: ("km",) * 2 + ("km/s",) * 2, 6: ("km",) * 3 + ("km/s",) * 3}
MU = 398600.4418


def chart(names: tuple[str, ...], start: np.ndarray | None = None, **table: object) -> Chart:
    adapter: TypeAdapter[ChartSettings] = TypeAdapter(ChartSettings)
    return build_chart(adapter.validate_python(table), names, UNITS[len(names)], start=start)


def orbit(a, e, i, node, peri, true):
    """Position and velocity by rotating the perifocal frame: not as the charts do it."""
    p = a * (1 - e) * (1 + e)
    r = p / (1 + e * np.cos(true))
    position = np.array([r * np.cos(true), r * np.sin(true), 0.0])
    velocity = np.sqrt(MU / p) * np.array([-np.sin(true), e + np.cos(true), 0.0])

    def turn(axis: int, angle: float) -> np.ndarray:
        c, s = np.cos(angle), np.sin(angle)
        return {
            1: np.array([[1, 0, 0], [0, c, -s], [0, s, c]]),
            3: np.array([[c, -s, 0], [s, c, 0], [0, 0, 1.0]]),
        }[axis]

    rotation = turn(3, node) @ turn(1, i) @ turn(3, peri)
    return np.concatenate([rotation @ position, rotation @ velocity])


def assert_round_trip(chart: Chart, state: np.ndarray, t: float) -> None:
    back = chart.to_state(chart.from_state(state, t), t)
    half = state.size // 2
    for part in (slice(None, half), slice(half, None)):
        assert np.linalg.norm(back[part] - state[part]) <= 1e-12 * np.linalg.norm(state[part])


angle = st.floats(-np.pi, np.pi)
orbits = st.tuples(
    st.floats(6.6e3, 4e5), st.floats(0.0, 0.9), st.floats(0.0, 2.9), angle, angle, angle
)
times = st.floats(0.0, 1e5)


@settings(deadline=None, max_examples=150)
@given(orbits, times)
@pytest.mark.parametrize("anomaly", ["mean", "true"])
def test_equinoctial_in_space(anomaly, elements, t):
    made = chart(SPATIAL, name="equinoctial", mu=MU, anomaly=anomaly, rotation_rate=7.292115e-5)
    assert_round_trip(made, orbit(*elements), t)


@settings(deadline=None, max_examples=100)
@given(orbits, times)
@pytest.mark.parametrize("anomaly", ["mean", "true"])
def test_retrograde_equinoctial(anomaly, elements, t):
    a, e, i, *rest = elements
    made = chart(SPATIAL, name="equinoctial", mu=MU, anomaly=anomaly, retrograde=True)
    assert_round_trip(made, orbit(a, e, np.pi - i, *rest), t)


@settings(deadline=None, max_examples=100)
@given(orbits, times)
@pytest.mark.parametrize("anomaly", ["mean", "true"])
@pytest.mark.parametrize("retrograde", [False, True])
def test_equinoctial_in_a_plane(anomaly, retrograde, elements, t):
    a, e, _, _, peri, true = elements
    state = orbit(a, e, np.pi if retrograde else 0.0, 0.0, peri, true)[[0, 1, 3, 4]]
    made = chart(
        PLANAR, name="equinoctial", mu=MU, anomaly=anomaly, retrograde=retrograde,
        rotation_rate=1e-4,
    )  # fmt: skip
    assert_round_trip(made, state, t)


@settings(deadline=None, max_examples=60)
@given(st.floats(1.001, 3.0), angle, st.floats(-1.5, 1.5))
def test_true_longitude_holds_open_orbits(e, peri, fraction):
    true = fraction / 1.6 * np.arccos(-1.0 / e)  # between the asymptotes
    p = 2.0e4
    r = p / (1 + e * np.cos(true))
    speed = np.sqrt(MU / p)
    c, s = np.cos(peri), np.sin(peri)
    rotate = np.array([[c, -s], [s, c]])
    state = np.concatenate(
        [
            rotate @ (r * np.array([np.cos(true), np.sin(true)])),
            rotate @ (speed * np.array([-np.sin(true), e + np.cos(true)])),
        ]
    )
    assert_round_trip(chart(PLANAR, name="equinoctial", mu=MU, anomaly="true"), state, 0.0)
    mean = chart(PLANAR, name="equinoctial", mu=MU)
    assert np.isnan(mean.from_state(state, 0.0)).any()


@settings(deadline=None, max_examples=150)
@given(orbits, st.floats(0.02, 2.9), times)
def test_classical_relative(elements, i, t):
    a, e, _, *rest = elements
    nominal = orbit(2.6e4, 0.1, 1.0, 0.3, 0.4, 0.5)
    made = chart(SPATIAL, start=nominal, name="classical_relative", mu=MU)
    assert_round_trip(made, orbit(a, e, i, *rest), t)
    flat = orbit(a, e, 0.0, 0.0, *rest[1:])[[0, 1, 3, 4]]
    nominal = orbit(2.6e4, 0.1, 0.0, 0.0, 0.4, 0.5)[[0, 1, 3, 4]]
    made = chart(PLANAR, name="classical_relative", mu=MU, nominal=nominal.tolist())
    assert_round_trip(made, flat, t)


@settings(deadline=None, max_examples=100)
@given(st.lists(st.floats(-1e3, 1e3), min_size=6, max_size=6), times)
@pytest.mark.parametrize(
    ("names", "table"),
    [
        (PLANAR, {"name": "cartesian"}),
        (PLANAR, {"name": "polar", "rotation_rate": 0.3}),
        (SPATIAL, {"name": "cylindrical", "rotation_rate": -0.3}),
        (PLANAR, {"name": "rotating", "frequencies": [0.0, 1.7]}),
        (SPATIAL, {"name": "rotating", "frequencies": [1.0, 1.7, 3.0]}),
        (PLANAR, {"name": "action_angle", "frequencies": [1.0, 1.7]}),
    ],
)
def test_other_charts(names, table, values, t):
    state = np.array(values[: len(names)])
    # a radius, or an action, of zero is singular; free motion carries rounding over v t,
    state = np.where(np.abs(state) < 1.0, 1.0, state)
    # and a phase of w t over the amplitude: so relative to the whole state, and per unit of time
    made = chart(names, **table)
    back = made.to_state(made.from_state(state, t / 1e3), t / 1e3)
    assert np.linalg.norm(back - state) <= 1e-12 * max(1.0, t / 1e3) * np.linalg.norm(state)


def test_a_state_in_another_order_with_a_mass():
    names = ("mass", "vy", "y", "vx", "x")
    state = orbit(2.6e4, 0.3, 0.0, 0.0, 0.4, 0.5)[[0, 1, 3, 4]]
    mixed = np.array([500.0, state[3], state[1], state[2], state[0]])
    table = {"name": "equinoctial", "mu": MU, "position": ["x", "y"], "velocity": ["vx", "vy"]}
    adapter: TypeAdapter[ChartSettings] = TypeAdapter(ChartSettings)
    made = build_chart(adapter.validate_python(table), names, ("kg", "km/s", "km", "km/s", "km"))
    plain = chart(PLANAR, name="equinoctial", mu=MU)
    values = made.from_state(mixed, 0.0)
    np.testing.assert_array_equal(values[:4], plain.from_state(state, 0.0))
    assert values[4] == 500.0
    assert made.components[4] == "mass"
    assert made.units == ("rad 1/s", "1", "1", "rad", "kg")
    np.testing.assert_allclose(made.to_state(values, 0.0), mixed, rtol=1e-12)


def test_shapes_and_missing_rows():
    rng = np.random.default_rng(5)
    start = orbit(2.6e4, 0.3, 0.5, 0.1, 0.4, 0.5)
    states = start * (1 + 1e-3 * rng.standard_normal((7, 5, 6)))
    states[3, 2:] = np.nan
    times = np.linspace(0.0, 1e4, 5)
    made = chart(SPATIAL, name="equinoctial", mu=MU)
    values = made.from_state(states, times)
    assert values.shape == states.shape
    np.testing.assert_array_equal(values[:, 4], made.from_state(states[:, 4], times[4]))
    assert np.isnan(values[3, 2:]).all()
    np.testing.assert_allclose(made.to_state(values, times), states, rtol=1e-10, atol=1e-9)
