"""What each chart is for, what it refuses, and how angles stay continuous."""

from __future__ import annotations

import numpy as np
import pytest
from pydantic import TypeAdapter, ValidationError
from scipy.integrate import solve_ivp

from nipc.errors import ChartError
from nipc.problem.charts import CHARTS, Chart, ChartSettings, build_chart
from nipc.problem.charts.angles import wrap

MU = 398600.4418
PLANAR = ("x", "y", "vx", "vy")
SPATIAL = ("x", "y", "z", "vx", "vy", "vz")
UNITS = {4: ("km",) * 2 + ("km/s",) * 2, 6: ("km",) * 3 + ("km/s",) * 3}
ADAPTER: TypeAdapter[ChartSettings] = TypeAdapter(ChartSettings)


def chart(names: tuple[str, ...], start: np.ndarray | None = None, **table: object) -> Chart:
    return build_chart(ADAPTER.validate_python(table), names, UNITS[len(names)], start=start)


def kepler_flow(start: np.ndarray, times: np.ndarray) -> np.ndarray:
    half = start.size // 2

    def rate(_, s):
        return np.concatenate([s[half:], -MU * s[:half] / np.linalg.norm(s[:half]) ** 3])

    solution = solve_ivp(rate, times[[0, -1]], start, "DOP853", times, rtol=3e-14, atol=1e-12)
    return solution.y.T[None]


ECCENTRIC = np.array([8000.0, 500.0, 3000.0, -1.0, 7.0, 3.5])


@pytest.mark.parametrize("names", [PLANAR, SPATIAL])
def test_keplers_flow_is_linear_in_mean_equinoctial_elements(names):
    start = ECCENTRIC if names is SPATIAL else ECCENTRIC[[0, 1, 3, 4]]
    times = np.linspace(0.0, 40000.0, 9)  # about four revolutions, half a turn a step
    made = chart(names, name="equinoctial", mu=MU, rotation_rate=1e-4)
    values = made.unwrap(made.from_state(kepler_flow(start, times), times), times)[0]
    assert np.ptp(values[:, :-1], axis=0).max() < 1e-10
    advance = values[:, -1] - values[0, -1]
    np.testing.assert_allclose(advance, (values[0, 0] - 1e-4) * times, rtol=1e-9, atol=1e-9)


def test_a_frame_that_turns_with_a_retrograde_orbit_freezes_it():
    start = ECCENTRIC * [1, 1, 1, -1, -1, 1]  # clockwise seen from above
    a = 1.0 / (2 / np.linalg.norm(start[:3]) - start[3:] @ start[3:] / MU)
    rate = -np.sqrt(MU / a**3)
    times = np.linspace(0.0, 20000.0, 9)
    made = chart(SPATIAL, name="equinoctial", mu=MU, retrograde=True, rotation_rate=rate)
    made.check(start[None])
    values = made.unwrap(made.from_state(kepler_flow(start, times), times), times)[0]
    assert np.ptp(values, axis=0).max() < 1e-9


def test_keplers_flow_in_relative_elements_is_a_drift_of_the_latitude_alone():
    times = np.linspace(0.0, 40000.0, 9)
    flow = kepler_flow(ECCENTRIC * 1.01, times)
    made = chart(SPATIAL, start=ECCENTRIC, name="classical_relative", mu=MU)
    values = made.unwrap(made.from_state(flow, times), times)[0]
    assert np.ptp(values[:, :-1], axis=0).max() < 1e-10
    a = 1.0 / (2 / np.linalg.norm(ECCENTRIC[:3]) - ECCENTRIC[3:] @ ECCENTRIC[3:] / MU)
    n0 = np.sqrt(MU / a**3)
    expected = n0 * ((1 + values[0, 0]) ** -1.5 - 1)
    np.testing.assert_allclose(np.diff(values[:, -1]), expected * 5000.0, rtol=1e-8)
    # the nominal orbit itself stays at zero
    still = made.from_state(kepler_flow(ECCENTRIC, times), times)
    assert np.abs(still).max() < 1e-9


def test_central_force_keeps_the_angular_momentum():
    times = np.linspace(0.0, 40000.0, 200)
    made = chart(SPATIAL, name="cylindrical", rotation_rate=1e-4)
    values = made.unwrap(made.from_state(kepler_flow(ECCENTRIC, times), times), times)[0]
    assert np.ptp(values[:, 4]) < 1e-7 * values[0, 4]
    assert np.all(np.diff(values[:, 1]) + 1e-4 * np.diff(times) > 0.0)


@pytest.mark.parametrize("name", ["rotating", "action_angle"])
def test_linear_motion_stands_still(name):
    w = np.array([1.0, np.sqrt(2.0)])
    times = np.linspace(0.0, 30.0, 61)
    x = np.cos(np.outer(times, w)) * [0.3, -0.2] + np.sin(np.outer(times, w)) * [0.1, 0.4]
    v = w * (-np.sin(np.outer(times, w)) * [0.3, -0.2] + np.cos(np.outer(times, w)) * [0.1, 0.4])
    made = chart(PLANAR, name=name, frequencies=w.tolist())
    values = made.unwrap(made.from_state(np.hstack([x, v])[None], times), times)[0]
    assert np.ptp(values, axis=0).max() < 1e-13
    if name == "rotating":
        np.testing.assert_allclose(values[0], [*x[0], *v[0]])
    else:
        energy = (v[0] ** 2 + (w * x[0]) ** 2) / 2
        np.testing.assert_allclose(values[0, :2] * w, energy)  # H = sum w J


def test_unwrap_follows_reference_and_expected_rate():
    made = chart(PLANAR, name="equinoctial", mu=MU)
    rng = np.random.default_rng(0)
    start = ECCENTRIC[[0, 1, 3, 4]]
    times = np.array([0.0, 21000.0, 60000.0])  # several revolutions between two times
    flow = np.concatenate(
        [kepler_flow(start * (1 + 1e-3 * rng.standard_normal(4)), times) for _ in range(5)]
    )
    values = made.from_state(flow, times)
    reference = np.full(4, 10 * np.pi)
    away = made.unwrap(values, times, reference)
    assert np.all(np.abs(away[:, 0, 3] - 10 * np.pi) <= np.pi)
    advance = away[:, :, 3] - away[:, :1, 3]
    np.testing.assert_allclose(advance, values[:, :1, 0] * times, rtol=1e-9)
    # without a reference: across the cut at pi the members stay together
    values = np.zeros((2, 3, 4))
    values[:, :, 3] = [[3.1, -3.1, -3.0], [-3.1, -3.0, -2.9]]
    together = made.unwrap(values)[:, :, 3]
    assert np.ptp(together[:, 0]) < 0.1
    assert np.abs(np.diff(together, axis=1)).max() < 0.2
    np.testing.assert_allclose(wrap(together), values[:, :, 3], atol=1e-14)


def test_unwrap_keeps_missing_rows_missing():
    made = chart(PLANAR, name="polar")
    values = np.ones((2, 4, 4))
    values[1, 2:] = np.nan
    result = made.unwrap(values, np.arange(4.0))
    assert np.isnan(result[1, 2:]).all()
    assert np.isfinite(result[1, :2]).all()


CIRCULAR = np.array([7000.0, 0.0, 0.0, 0.0, np.sqrt(MU / 7000.0), 0.0])
STILL = np.array([7000.0, 0.0, 0.0, 0.0])
REFUSED = [
    (PLANAR, {"name": "polar"}, np.array([0.0, 0.0, 1.0, 0.0]), "radius is 0"),
    (SPATIAL, {"name": "cylindrical"}, np.array([0.0, 0, 7e3, 1.0, 0, 0]), "radius is 0"),
    (PLANAR, {"name": "equinoctial", "mu": MU}, np.array([7e3, 0, 0, -7.0]), "retrograde = true"),
    (
        PLANAR,
        {"name": "equinoctial", "mu": MU, "retrograde": True},
        np.array([7e3, 0, 0, 7.0]),
        "retrograde = false",
    ),
    (PLANAR, {"name": "equinoctial", "mu": MU}, np.array([7e3, 0, 0, 11.0]), "open orbit"),
    (PLANAR, {"name": "equinoctial", "mu": MU}, np.array([7e3, 0, 5.0, 0]), "straight"),
    (PLANAR, {"name": "equinoctial", "mu": MU}, STILL, "straight"),
    (SPATIAL, {"name": "equinoctial", "mu": MU}, CIRCULAR * [1, 1, 1, 1, -1, 1], "180 deg"),
    (SPATIAL, {"name": "equinoctial", "mu": MU}, np.array([7e3, 0, 0, 2.0, 0, 0]), "straight"),
    (PLANAR, {"name": "action_angle", "frequencies": [1.0, 1.0]}, STILL, "action of 'y' is zero"),
]


@pytest.mark.parametrize(("names", "table", "state", "reason"), REFUSED)
def test_singular_starts_are_refused_with_the_reason(names, table, state, reason):
    with pytest.raises(ChartError, match=reason):
        chart(names, **table).check(np.stack([state, state]))


def test_relative_elements_refuse_a_nominal_orbit_without_a_node():
    with pytest.raises(ChartError, match="no node"):
        chart(SPATIAL, start=CIRCULAR, name="classical_relative", mu=MU)
    with pytest.raises(ChartError, match="give `nominal`"):
        chart(SPATIAL, name="classical_relative", mu=MU)
    made = chart(SPATIAL, start=ECCENTRIC, name="classical_relative", mu=MU)
    with pytest.raises(ChartError, match="no node"):
        made.check(np.stack([ECCENTRIC, CIRCULAR]))


def test_a_start_all_around_the_circle_is_refused():
    around = np.linspace(-np.pi, np.pi, 40)
    states = np.stack([np.cos(around), np.sin(around), -np.sin(around), np.cos(around)], axis=1)
    with pytest.raises(ChartError, match="polar_angle is spread"):
        chart(PLANAR, name="polar").check(states)
    chart(PLANAR, name="polar").check(states[:20])  # half of it is held


@pytest.mark.parametrize("name", sorted(set(CHARTS) - {"functions"}))
def test_every_chart_accepts_an_ordinary_start(name):
    table: dict[str, object] = {"name": name}
    if name in ("equinoctial", "classical_relative"):
        table["mu"] = MU
    if name in ("rotating", "action_angle"):
        table["frequencies"] = [1e-3] * 3
    names = PLANAR if name == "polar" else SPATIAL
    start = ECCENTRIC if names is SPATIAL else ECCENTRIC[[0, 1, 3, 4]]
    if name == "action_angle":
        start = np.array([1.0, 2.0, 3.0, 0.1, 0.2, 0.3])
    rng = np.random.default_rng(1)
    made = chart(names, start=start, **table)
    made.check(start * (1 + 1e-3 * rng.standard_normal((50, start.size))))
    assert len(made.components) == len(made.units) == start.size


def test_wrong_settings():
    with pytest.raises(ValidationError, match="radius"):
        ADAPTER.validate_python({"name": "polar", "radius": 1})
    with pytest.raises(ValidationError, match="greater than 0"):
        ADAPTER.validate_python({"name": "equinoctial", "mu": -1.0})
    with pytest.raises(ValidationError, match="nonsense"):
        ADAPTER.validate_python({"name": "nonsense"})
    with pytest.raises(ChartError, match="needs 2 positions"):
        chart(SPATIAL, name="polar")
    with pytest.raises(ChartError, match="no component of the state"):
        chart(PLANAR, name="polar", position=["x", "q"], velocity=["vx", "vy"])
    with pytest.raises(ChartError, match="both"):
        chart(PLANAR, name="polar", position=["x", "y"])
    with pytest.raises(ChartError, match="twice"):
        chart(PLANAR, name="polar", position=["x", "y"], velocity=["vx", "x"])
    with pytest.raises(ChartError, match="3 frequencies for 2 positions"):
        chart(PLANAR, name="rotating", frequencies=[1.0, 2.0, 3.0])
    with pytest.raises(ChartError, match="no angular frequency"):
        chart(PLANAR, name="action_angle", frequencies=[1.0, 0.0])
    with pytest.raises(ChartError, match="not positions and velocities alone"):
        build_chart(ADAPTER.validate_python({"name": "polar"}), ("x", "y", "m"), ("1",) * 3)


def test_no_settings_is_cartesian_of_any_size():
    made = build_chart(None, ("a", "b", "c"), ("1", "m", "K"))
    states = np.arange(6.0).reshape(2, 3)
    made.check(states)
    assert made.components == ("a", "b", "c")
    np.testing.assert_array_equal(made.to_state(made.from_state(states, 1.0), 1.0), states)


USER_MODULE = """
import numpy as np

def forward(states, t):
    return np.stack([np.log(states[:, 0]) - t, states[:, 1]], axis=1)

def backward(values, t):
    return np.stack([np.exp(values[:, 0] + t), values[:, 1]], axis=1)

def wrong(values, t):
    return np.stack([np.exp(values[:, 0]), 2 * values[:, 1]], axis=1)

def flat(values, t):
    return values[:, 0]
"""


def test_the_users_own_functions(tmp_path):
    (tmp_path / "my_chart.py").write_text(USER_MODULE)

    def make(**changes: object) -> Chart:
        table = {
            "name": "functions",
            "from_state": "my_chart:forward",
            "to_state": "my_chart:backward",
            "components": ["log_size", "rest"],
        }
        settings = ADAPTER.validate_python({**table, **changes})
        return build_chart(settings, ("size", "rest"), ("m", "1"), folder=tmp_path)

    rng = np.random.default_rng(2)
    states = np.exp(rng.standard_normal((3, 4, 2)))
    times = np.array([0.0, 1.0, 1.0, 2.0])
    made = make()
    values = made.from_state(states, times)
    np.testing.assert_allclose(values[..., 0], np.log(states[..., 0]) - times)
    np.testing.assert_allclose(made.to_state(values, times), states, rtol=1e-14)
    made.check(states[:, 0])
    with pytest.raises(ChartError, match="state component 2"):
        make(to_state="my_chart:wrong").check(states[:, 0], 0.0)
    with pytest.raises(ChartError, match="log_size is not finite"):
        made.check(np.zeros((2, 2)))
    with pytest.raises(ChartError, match="shape"):
        make(from_state="my_chart:flat").from_state(states, 0.0)
    with pytest.raises(ChartError, match="no function"):
        make(from_state="my_chart:absent")
    with pytest.raises(ChartError, match="cannot be imported"):
        make(from_state="no_such_module:f")
    with pytest.raises(ChartError, match="module:function"):
        make(from_state="my_chart")
    with pytest.raises(ChartError, match="no component of it"):
        make(angles=["phase"])
    with pytest.raises(ChartError, match="keeps the number"):
        make(components=["one"])
