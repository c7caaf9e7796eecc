"""Right-hand sides: every integrator against the exact motion; endings against closed forms."""

from textwrap import dedent

import numpy as np
import pytest
from adapters_samples import build, context, one_by_one, oscillator, oscillator_batch

from nipc.adapters import load_adapter
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import NoiseModel
from nipc.runs.propagator import Batch

SINGLE = """
    def rates(t, x, xi, parameters):
        assert x.shape == (2,) and xi.shape == (1,)
        return [x[1], -parameters[0] * x[0] + xi[0]]
"""
MANY = """
    import numpy as np
    def rates(t, x, xi, parameters):
        return np.stack([x[:, 1], -parameters[:, 0] * x[:, 0] + xi[:, 0]], axis=1)
    def fall(t, x, xi, parameters):
        return np.stack([x[:, 1], np.full(len(x), -9.81)], axis=1)
    def ground(t, x, parameters):
        return x[:, 0]
    def fall_one(t, x, xi, parameters):
        return [x[1], -9.81]
    def ground_one(t, x, parameters):
        return x[0]
    def stiff(t, x, xi, parameters):
        return np.stack([x[:, 1], -1e4 * x[:, 0] - 1e4 * x[:, 1]], axis=1)
"""
ACCURACY = {
    "DOP853": 1e-7, "RK45": 1e-7, "RK23": 1e-6, "LSODA": 1e-6, "Radau": 1e-6, "BDF": 1e-5,
    "rk4": 2e-7, "rk8": 1e-12,
}  # fmt: skip


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "one.py").write_text(dedent(SINGLE))
    (tmp_path / "many.py").write_text(dedent(MANY))
    return tmp_path


def steps(method):
    return {"step": 0.02} if method.startswith("rk") else {"rtol": 1e-8, "atol": 1e-10}


@pytest.mark.parametrize("method", ACCURACY)
def test_single_runs_follow_the_exact_motion(method, folder):
    batch = oscillator_batch(2)
    propagator = build("ode", folder, rhs="one:rates", method=method, **steps(method))
    states, _ = one_by_one(propagator, batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=ACCURACY[method])


@pytest.mark.parametrize("method", ACCURACY)
def test_batches_follow_the_exact_motion(method, folder):
    batch = oscillator_batch(30)
    propagator = build("ode", folder, rhs="many:rates", batch=True, method=method, **steps(method))
    np.testing.assert_allclose(
        propagator.propagate(batch).states, oscillator(batch), atol=ACCURACY[method]
    )


def test_a_bad_run_does_not_hide_among_good_ones(folder):
    """One run at full size among 63 at rest is as accurate as it is alone."""
    batch = oscillator_batch(64, terms=1, intensity=1e-12)
    still = batch.states.copy()
    still[1:] *= 1e-9
    batch = Batch(still, batch.times, batch.forcing, batch.parameters)
    settings = {"rhs": "many:rates", "batch": True, "rtol": 1e-6, "atol": 1e-9}
    exact = oscillator(batch.take(slice(0, 1)))
    together = build("ode", folder, **settings).propagate(batch).states[:1]
    alone = build("ode", folder, **settings).propagate(batch.take(slice(0, 1))).states
    error, reference = np.abs(together - exact).max(), np.abs(alone - exact).max()
    assert 0 < error <= 2 * reference


def test_fixed_steps_do_not_let_runs_see_each_other(folder):
    batch = oscillator_batch(9)
    propagator = build("ode", folder, rhs="many:rates", batch=True, method="rk8", step=0.3)
    whole = propagator.propagate(batch).states
    part = propagator.propagate(batch.take(np.array([7, 2]))).states
    assert part.tolist() == whole[[7, 2]].tolist()


def falling(n, dimension_times=9):
    model = NoiseModel((), (), 0.0, 2.0)
    heights = np.linspace(1.0, 30.0, n)
    return Batch(
        np.stack([heights, np.zeros(n)], axis=1), np.linspace(0.0, 2.0, dimension_times),
        model.realise(np.empty((n, 0))), np.empty((n, 0)),
    )  # fmt: skip


@pytest.mark.parametrize("method", ["DOP853", "RK45", "rk4", "rk8"])
@pytest.mark.parametrize("together", [True, False])
def test_a_fall_ends_at_the_ground(method, together, folder):
    """t = sqrt(2 h / g); who starts higher than g t^2 / 2 is still in the air."""
    batch = falling(8)
    more = {"step": 0.05} if method.startswith("rk") else {}
    if together:
        propagator = build(
            "ode", folder, rhs="many:fall", stop="many:ground", batch=True, method=method, **more
        )
        found = propagator.propagate(batch)
        states, ended = found.states, found.ended
    else:
        propagator = build(
            "ode", folder, rhs="one_way:fall_one", stop="one_way:ground_one", method=method, **more
        ) if (folder / "many.py").rename(folder / "one_way.py") else None  # fmt: skip
        states, ended = one_by_one(propagator, batch)
    exact = np.sqrt(2 * batch.states[:, 0] / 9.81)
    down = exact < 2.0
    assert down.sum() == 5
    np.testing.assert_allclose(ended[down], exact[down], rtol=1e-9)
    assert np.isnan(ended[~down]).all()
    alive = ~(batch.times[None] > np.where(down, exact, np.inf)[:, None])
    assert np.isfinite(states[alive]).all()
    assert np.isnan(states[~alive]).all()
    fall = batch.states[:, :1] - 9.81 * batch.times**2 / 2
    np.testing.assert_allclose(states[..., 0][alive], fall[alive], atol=1e-7)


def test_a_stiff_batch_takes_an_implicit_method(folder):
    batch = falling(5)
    propagator = build("ode", folder, rhs="many:stiff", batch=True, method="Radau", rtol=1e-6)
    found = propagator.propagate(batch).states[:, -1, 0]
    # slow root of s^2 + 1e4 s + 1e4 = 0, and its share of the start at rest
    slow, fast = np.roots([1, 1e4, 1e4])[::-1]
    share = fast / (fast - slow)
    np.testing.assert_allclose(found, batch.states[:, 0] * share * np.exp(2 * slow), rtol=1e-4)


@pytest.mark.parametrize(
    ("body", "settings", "said"),
    [
        ("return [x[1]]", {}, r"rhs returned shape \(1, 1\); it must be \(1, 2\)"),
        ("return [x[1], 1 / 0.0]", {}, "ZeroDivisionError|division"),
        ("return [x[1], float('nan')]", {}, "rhs is not finite at the start, t = 1"),
        (
            "return [x[1], 0.0 if t < 2 else float('nan')]",
            {},
            "gave up at t = 2: rhs is not finite near t = 2",
        ),
        ("return [x[1], 1e3 * x[0] ** 2 + 1e3]", {}, "gave up at t = 1"),
        ("return 'fast'", {"method": "rk4", "step": 0.1}, "rhs returned shape"),
    ],
)
def test_a_wrong_right_hand_side_is_told(body, settings, said, tmp_path):
    (tmp_path / "bad.py").write_text(f"def rates(t, x, xi, p):\n    {body}\n")
    propagator = build("ode", tmp_path, rhs="bad:rates", **settings)
    with pytest.raises((PropagatorError, ZeroDivisionError), match=said):
        propagator.propagate(oscillator_batch(1))


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"method": "rk8"}, "give step, in the clock's unit"),
        ({"step": 0.1}, "leave step out, or give max_step"),
        ({"method": "rk4", "step": 0.1, "max_step": 1.0}, "give step, not max_step"),
        ({"method": "euler"}, "DOP853"),
        ({"rtol": 0.0}, "rtol"),
        ({"steps": 3}, "steps"),
    ],
)
def test_settings_that_cannot_be(settings, said):
    with pytest.raises(ValueError, match=said):
        load_adapter("ode").Settings(rhs="one:rates", **settings)


def test_tolerances_of_each_component_must_be_as_many(folder):
    with pytest.raises(InputError, match="atol has 3 values for 2 state components"):
        build("ode", folder, context(folder), rhs="one:rates", atol=[1e-9, 1e-9, 1e-9])
