"""Kicks between legs: convergence, closed forms of both calculi, axes, endings, wrong settings."""

from textwrap import dedent

import numpy as np
import pytest
from adapters_samples import build, context, one_by_one, oscillator, oscillator_batch
from kicked_motions import clohessy_wiltshire_error, geostationary_error

from nipc.adapters import load_adapter
from nipc.adapters.kick_axes import orbit_axis
from nipc.adapters.kick_times import KickTimes
from nipc.errors import InputError

CODE = """
    import numpy as np
    def swing(x0, times, forcing, p):
        assert forcing.names == ()
        w, t = np.sqrt(p[0]), times - times[0]
        c, s = np.cos(w * t), np.sin(w * t)
        return np.stack([x0[0] * c + x0[1] / w * s, x0[1] * c - w * x0[0] * s], axis=1)
    def swing_many(x0, times, forcing, p):
        w, t = np.sqrt(p), times - times[0]
        c, s = np.cos(w * t), np.sin(w * t)
        return np.stack([x0[:, :1] * c + x0[:, 1:] / w * s, x0[:, 1:] * c - w * x0[:, :1] * s], 2)
    def rest(x0, times, forcing, p):
        return np.repeat(x0[:, None], len(times), axis=1)
    def proportional(t, x, p):
        return x * [1.0, 0.0]
    def push(t, x, p):
        return np.broadcast_to([0.0, 1.0], x.shape)
    def until_two(x0, times, forcing, p):
        ended = np.where(np.zeros(len(x0)) + times[-1] > 2.0, max(2.0, times[0]), np.nan)
        states = np.repeat(x0[:, None], len(times), axis=1)
        states[:, times > 2.0] = np.nan
        return states, ended
"""
KICK = ({"source": "push1", "component": "v"},)


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "inner.py").write_text(dedent(CODE))
    return tmp_path


def kicked(folder, function="swing_many", kick=KICK, where=None, batch=True, **more):
    inner = {"adapter": "function", "function": f"inner:{function}", "batch": batch}
    return build("kicks", folder, where, propagator=inner, kick=kick, **more)


def test_order_four_towards_the_forced_motion(folder):
    """Two kicks a cell have two moments of the path: a linear motion errs by h^4."""
    batch = oscillator_batch(6, times=2)
    exact = oscillator(batch)
    errors = [
        np.abs(kicked(folder, legs=legs).propagate(batch).states - exact).max()
        for legs in (8, 16, 32)
    ]
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(rates, 4.0, atol=0.3)


def test_single_kicks_are_of_order_two(folder):
    """With an output time for each leg there is one kick, in the middle."""
    errors = []
    for times in (9, 17, 33):
        batch = oscillator_batch(6, times=times)
        found = kicked(folder, legs=times - 1).propagate(batch)
        errors.append(np.abs(found.states - oscillator(batch)).max())
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(rates, 2.0, atol=0.2)


def test_kicks_have_the_moments_of_the_path():
    batch = oscillator_batch(3, terms=6)
    plan = KickTimes.over(np.array([1.0, 2.0, 2.5, 4.0]), 5)
    assert plan.edges.tolist() == [1.0, 2.0, 2.5, 3.25, 4.0]
    assert plan.paired.tolist() == [True, False, True, True]
    sizes = plan.sizes(batch.forcing)[:, :, 0]
    assert sizes.shape == (3, 7)
    np.testing.assert_allclose(plan.shares.sum(), 3.0)
    nodes, weights = np.polynomial.legendre.leggauss(20)
    for first, last, which in ((1.0, 2.0, slice(0, 2)), (3.25, 4.0, slice(5, 7))):
        t = 0.5 * (first + last) + 0.5 * (last - first) * nodes
        xi = batch.forcing.table(t)[:, :, 0] * weights * 0.5 * (last - first)
        np.testing.assert_allclose(sizes[:, which].sum(axis=1), xi.sum(axis=1))
        np.testing.assert_allclose(sizes[:, which] @ plan.times[which], xi @ t, atol=1e-12)


def test_single_runs_and_batches_agree_and_outputs_lie_between_kicks(folder):
    batch = oscillator_batch(4, times=7)
    many = kicked(folder, legs=12).propagate(batch).states
    single, _ = one_by_one(kicked(folder, "swing", batch=False, legs=12), batch)
    np.testing.assert_allclose(single, many, rtol=0, atol=1e-14)
    np.testing.assert_allclose(many, oscillator(batch), atol=2e-2)


def test_legs_are_doubled_until_nothing_changes(folder):
    batch = oscillator_batch(5, times=3)
    exact = oscillator(batch)
    free = kicked(folder, legs=1).inner.propagate(batch.take(slice(0, 5))).states
    effect = np.abs(exact - free).max(axis=1)
    for tolerance in (1e-2, 1e-4):
        found = kicked(folder, tolerance=tolerance).propagate(batch)
        error = np.abs(found.states - exact).max(axis=1) / effect
        # second order: what is left is a third of the last change
        assert error.max() < tolerance / 2
        assert np.isnan(found.ended).all()


def test_each_run_chooses_its_legs_by_itself(folder):
    batch = oscillator_batch(5, times=3)
    propagator = kicked(folder, tolerance=1e-3)
    whole = propagator.propagate(batch).states
    for i in range(5):
        alone = propagator.propagate(batch.take(slice(i, i + 1))).states
        np.testing.assert_allclose(alone[0], whole[i], rtol=0, atol=1e-14)


@pytest.mark.parametrize("ito", [True, False])
def test_multiplicative_noise_in_both_readings(ito, folder):
    """dx = s x dW: x exp(s W - s^2 t / 2) in Ito's sense, x exp(s W) in Stratonovich's.

    Closed forms of geometric Brownian motion (Oksendal, Stochastic Differential Equations, ch. 5).
    """
    batch = oscillator_batch(5, times=3, intensity=0.4)
    where = context(folder, ito=("push1",) if ito else ())
    kick = ({"source": "push1", "function": "inner:proportional"},)
    found = kicked(folder, "rest", kick, where, legs=40).propagate(batch).states[:, :, 0]
    path = np.cumsum(batch.forcing.increments(batch.times)[:, :, 0], axis=1)
    drift = -0.5 * 0.4**2 * (batch.times[1:] - batch.times[0]) if ito else 0.0
    exact = batch.states[:, :1] * np.exp(path + drift)
    np.testing.assert_allclose(found[:, 1:], exact, rtol=1e-6)


def test_a_source_without_a_kick_goes_to_the_propagator_itself(tmp_path):
    (tmp_path / "inner.py").write_text(
        "import numpy as np\n"
        "def rates(t, x, xi, p):\n"
        "    return np.stack([x[:, 1], -p[:, 0] * x[:, 0] + xi[:, 0]], axis=1)\n"
    )
    batch = oscillator_batch(3, sources=2)
    where = context(tmp_path, sources=("push1", "push2"))
    inner = {"adapter": "ode", "rhs": "inner:rates", "batch": True, "method": "rk8", "step": 0.1}
    kick = ({"source": "push2", "component": "v", "scale": 0.0},)
    found = build("kicks", tmp_path, where, propagator=inner, kick=kick, legs=3).propagate(batch)
    np.testing.assert_allclose(found.states, oscillator(batch), atol=1e-9)


SWING = """#!/usr/bin/env python3
import math, sys

def swing(x, v, k, times):
    w = math.sqrt(k)
    for t in times:
        c, s = math.cos(w * (t - times[0])), math.sin(w * (t - times[0]))
        yield from (x * c + v / w * s, v * c - w * x * s)

for line in sys.stdin:
    words = line.split()
    m = int(words[0])
    head = 5 if len(sys.argv) > 1 else 1  # persistent requests begin with five counts
    numbers = [float(word) for word in words[head:]]
    states = list(swing(*numbers[m : m + 3], numbers[:m]))
    if head == 5:
        print("ok", *map(repr, states), flush=True)
    else:
        for x, v in zip(states[::2], states[1::2]):
            print(repr(x), repr(v))
"""


def test_kicks_around_each_kind_of_adapter(compiled, folder):
    """The same swing as a function, a right-hand side, a library and two kinds of program."""
    program = folder / "swing.py"
    program.write_text(SWING)
    program.chmod(0o755)
    (folder / "slope.py").write_text("def rates(t, x, xi, p):\n    return [x[1], -p[0] * x[0]]\n")
    library = compiled("motion.f90", "-shared", "-fPIC")
    deck = "{{ n_times }} {% for t in times %}{{ number(t) }} {% endfor %}"
    deck += "{{ number(x) }} {{ number(v) }} {{ number(k) }}\n"
    kinds = {
        "ode": {"rhs": "slope:rates", "rtol": 1e-12},
        "library": {
            "library": str(library), "function": "swing", "returns": "nothing",
            "arguments": ("state", "n_times", "times", "parameters", "states"),
            "by_reference": True,
        },
        "persistent": {"command": ("swing.py", "stay")},
        "executable": {
            "command": ("swing.py",), "stdin": "deck", "stdout": "table",
            "inputs": ({"file": "deck", "text": deck, "language": "jinja"},),
            "output": {"file": "table", "columns": (1, 2)},
        },
    }  # fmt: skip
    batch = oscillator_batch(2, times=3)
    expected = kicked(folder, legs=4).propagate(batch).states
    for name, table in kinds.items():
        propagator = build("kicks", folder, propagator={"adapter": name} | table, kick=KICK, legs=4)
        found, _ = one_by_one(propagator, batch)
        np.testing.assert_allclose(found, expected, atol=1e-10, err_msg=name)
        if name == "persistent":
            propagator.inner.close()


def test_kicks_do_not_fit_into_a_map():
    with pytest.raises(ValueError, match="give the map its noise"):
        load_adapter("kicks").Settings(propagator={"adapter": "map", "map": "a:b"}, kick=KICK)


def test_runs_that_end_between_kicks(folder):
    batch = oscillator_batch(3)
    found = kicked(folder, "until_two", legs=5).propagate(batch)
    assert found.ended.tolist() == [2.0] * 3
    assert np.isfinite(found.states[:, :, 0]).tolist() == [[True] * 3 + [False] * 4] * 3


def test_axes_of_an_orbit():
    r, v = np.array([[0.0, 2.0, 0.0]]), np.array([[-3.0, 1.0, 0.0]])
    assert orbit_axis("radial", r, v).tolist() == [[0, 1, 0]]
    assert orbit_axis("normal", r, v).tolist() == [[0, 0, 1]]
    assert orbit_axis("transverse", r, v).tolist() == [[-1, 0, 0]]
    np.testing.assert_allclose(orbit_axis("velocity", r, v), v / np.sqrt(10))
    # in a plane; and the other way round, transverse follows the motion
    assert orbit_axis("transverse", r[:, :2], v[:, :2]).tolist() == [[-1, 0]]
    assert orbit_axis("transverse", r[:, :2], -v[:, :2]).tolist() == [[1, 0]]
    assert orbit_axis("transverse", r, -v).tolist() == [[1, 0, 0]]


@pytest.mark.parametrize("error", [clohessy_wiltshire_error, geostationary_error])
def test_covariance_of_kicked_motions(error):
    """Within 1 % of the forced one's with 8 legs a quarter period, and nearer by order four.

    Clohessy & Wiltshire (1960) against Van Loan's block exponential (1978); the geostationary
    example's dynamics against the same noise as a path.
    """
    errors = [error(legs) for legs in (4, 8)]
    assert errors[1] < 0.01
    # order four means a sixteenth; half of that order would be a quarter
    assert 0 < errors[1] < errors[0] / 6


def test_the_number_of_legs_that_a_halving_test_finds(folder):
    """Twice as many legs change nothing beyond the tolerance, and half as many would have."""
    batch = oscillator_batch(4, times=2)
    propagator = kicked(folder, tolerance=1e-3)
    legs = propagator.legs_needed(batch)
    exact, free = oscillator(batch), propagator.inner.propagate(batch).states
    effect = np.abs(exact - free).max(axis=(0, 1))

    def error(count):
        found = kicked(folder, legs=count).propagate(batch).states
        return (np.abs(found - exact).max(axis=(0, 1)) / effect).max()

    # the last change is of the coarser of two answers, that is fifteen sixteenths of its error
    assert error(legs) < 1.1e-3 < error(legs // 2)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"kick": ({"source": "wind", "component": "v"},)}, "there is no noise source 'wind'"),
        ({"kick": ({"source": "push1", "component": "y"},)}, "'y' is no state component"),
        ({"kick": KICK + KICK}, "has two kicks"),
        ({"propagator": {"adapter": "rocket"}}, "no adapter 'rocket'"),
        ({"propagator": {"adapter": "function"}}, r"propagator\.propagator: function: Field"),
        (
            {"kick": ({"source": "push1", "function": "gone:f"},)}, "there is no module 'gone'",
        ),
    ],
)  # fmt: skip
def test_what_cannot_work_is_refused(change, said, folder):
    adapter = load_adapter("kicks")
    inner = {"adapter": "function", "function": "inner:swing"}
    settings = adapter.Settings.model_validate({"propagator": inner, "kick": KICK} | change)
    with pytest.raises(InputError, match=said):
        adapter.check(settings, context(folder))


@pytest.mark.parametrize(
    ("kick", "said"),
    [
        ({}, "give one of component, axis, function"),
        ({"component": "v", "axis": "radial"}, "give one of"),
        ({"axis": "radial", "velocity": ("x", "v")}, "needs position"),
        (
            {"axis": "normal", "position": ("x", "y"), "velocity": ("u", "v")},
            "has no normal axis",
        ),
        ({"component": "v", "size": 3}, "size"),
    ],
)
def test_kicks_that_cannot_be(kick, said):
    inner = {"adapter": "function", "function": "inner:swing"}
    with pytest.raises(ValueError, match=said):
        load_adapter("kicks").Settings(propagator=inner, kick=({"source": "push1", **kick},))
