"""Discrete maps: an area-preserving map, noise a step, losses, and times that are no steps."""

from textwrap import dedent

import numpy as np
import pytest
from adapters_samples import build, one_by_one

from nipc.errors import PropagatorError
from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import Batch

CODE = """
    import numpy as np
    def turn(k, x, w, p):
        # rotation after a kick, one run or many
        c, s = np.cos(p[..., 0]), np.sin(p[..., 0])
        y = x[..., 1] + w[..., 0]
        return np.stack([c * x[..., 0] + s * y, c * y - s * x[..., 0]], axis=-1)
    def grow(k, x, w, p):
        return 2 * x
    def outside(x, p):
        return np.abs(x[..., 0]) > 5.0
    def wrong(k, x, w, p):
        return x[..., 0]
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "ring.py").write_text(dedent(CODE))
    return tmp_path


def batch_of(n=5, start=10.0, turns=12, times=4):
    rng = np.random.default_rng(1)
    model = NoiseModel((Source("push1", "", 0.1),), (Legendre(5),), start, start + turns)
    return Batch(
        rng.normal(size=(n, 2)), np.linspace(start, start + turns, times),
        model.realise(rng.normal(size=(n, 5))), rng.uniform(0, 6, size=(n, 1)),
    )  # fmt: skip


@pytest.mark.parametrize("together", [True, False])
def test_turns_with_the_noise_of_each(together, folder):
    batch = batch_of()
    propagator = build("map", folder, map="ring:turn", batch=together)
    states = propagator.propagate(batch).states if together else one_by_one(propagator, batch)[0]
    # the same as complex numbers: z -> (z + i w) exp(-i p)
    kicks = batch.forcing.increments(np.arange(10.0, 23.0))[:, :, 0]
    z = batch.states[:, 0] + 1j * batch.states[:, 1]
    for k in range(12):
        assert np.array_equal(batch.times, [10, 14, 18, 22])
        if k % 4 == 0:
            np.testing.assert_allclose(states[:, k // 4, 0] + 1j * states[:, k // 4, 1], z)
        z = (z + 1j * kicks[:, k]) * np.exp(-1j * batch.parameters[:, 0])
    np.testing.assert_allclose(states[:, -1, 0] + 1j * states[:, -1, 1], z)


@pytest.mark.parametrize("together", [True, False])
def test_what_is_lost_ends_there(together, folder):
    """2^k from 1 and from 0.1: beyond 5 in the third step and in the sixth."""
    batch = batch_of(2)
    batch = Batch(np.array([[1.0, 0], [0.1, 0]]), batch.times, batch.forcing, batch.parameters)
    propagator = build("map", folder, map="ring:grow", lost="ring:outside", batch=together)
    if together:
        found = propagator.propagate(batch)
        states, ended = found.states, found.ended
    else:
        states, ended = one_by_one(propagator, batch)
    assert ended.tolist() == [12.0, 15.0]
    assert np.isfinite(states[:, :, 0]).tolist() == [
        [True, False, False, False],
        [True, True, False, False],
    ]


def test_a_step_of_another_length_and_origin(folder):
    batch = batch_of(1)
    found = build("map", folder, map="ring:grow", step=2.0, origin=10.0).propagate(batch)
    np.testing.assert_allclose(found.states[0, :, 0] / batch.states[0, 0], [1, 4, 16, 64])


def test_times_inside_a_step_and_wrong_shapes_are_told(folder):
    batch = batch_of(1, start=10.5)
    with pytest.raises(PropagatorError, match=r"t = 10\.5 lies inside a step"):
        build("map", folder, map="ring:grow").propagate(batch)
    with pytest.raises(PropagatorError, match=r"the map returned shape \(\); it must be \(2,\)"):
        build("map", folder, map="ring:wrong").propagate(batch_of(1))
