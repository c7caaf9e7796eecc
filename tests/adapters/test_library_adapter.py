"""Functions of shared libraries: C and Fortran, single and batch, endings, crashes."""

import numpy as np
import pytest
from adapters_samples import build, context, one_by_one, oscillator, oscillator_batch

from nipc.adapters import load_adapter
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import Forcing
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import Batch

ONE = ("state", "n_times", "times", "parameters", "n_forcing", "forcing_times", "forcing", "states")
ACCURACY = 1e-6  # Runge-Kutta of order four: T h^4 / 120 times a fifth derivative of about 3


@pytest.fixture
def library(compiled):
    return compiled("motion.c", "-shared", "-fPIC")


def made(library, folder, function="propagate", arguments=ONE, **more):
    more = {"forcing_step": 0.025} | more
    return build(
        "library", folder, library=str(library), function=function, arguments=arguments, **more
    )


def test_one_run(library, tmp_path):
    batch = oscillator_batch(3)
    states, ended = one_by_one(made(library, tmp_path), batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=ACCURACY)
    assert np.isnan(ended).all()


def test_a_batch_entry(library, tmp_path):
    batch = oscillator_batch(9)
    many = made(library, tmp_path, "propagate_many", ("n_runs", *ONE), batch=True)
    single, _ = one_by_one(made(library, tmp_path), batch)
    assert many.vectorised
    # the same arithmetic; the forcing tables differ by the rounding of one product
    np.testing.assert_allclose(many.propagate(batch).states, single, rtol=0, atol=1e-14)


def test_a_function_that_only_returns_the_end(library, tmp_path):
    batch = oscillator_batch(3)
    arguments = ("state", "step", "parameters", "n_forcing", "forcing", "final")
    states, _ = one_by_one(made(library, tmp_path, "finish", arguments, returns="nothing"), batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=ACCURACY)


def test_a_function_that_writes_to_what_it_is_given_harms_no_other_run(library, tmp_path):
    batch = oscillator_batch(2)
    before = [a.copy() for a in (batch.states, batch.times, batch.parameters)]
    germ = batch.forcing.coefficients.copy()
    arguments = ("state", "times", "parameters", "coefficients", "final")
    propagator = made(library, tmp_path, "in_place", arguments, returns="nothing")
    states, _ = one_by_one(propagator, batch)
    x, v = before[0].T
    expected = x[:, None] + v[:, None] * (before[1] - before[1][0])
    np.testing.assert_allclose(states[:, :, 0], expected, rtol=1e-13)
    after = (batch.states, batch.times, batch.parameters)
    assert all(np.array_equal(a, b) for a, b in zip(after, before, strict=True))
    assert np.array_equal(batch.forcing.coefficients, germ)


def test_fortran_by_reference(compiled, tmp_path):
    library = compiled("motion.f90", "-shared", "-fPIC")
    batch = oscillator_batch(2)
    batch = Batch(
        batch.states, batch.times, Forcing(batch.forcing.model, 0 * batch.forcing.coefficients),
        batch.parameters,
    )  # fmt: skip
    adapter = load_adapter("library")
    settings = adapter.Settings(
        library=str(library), function="swing", returns="nothing", by_reference=True,
        arguments=("state", "n_times", "times", "parameters", "states"),
    )  # fmt: skip
    propagator = adapter.build(settings, context(tmp_path, sources=()))
    states, _ = one_by_one(propagator, batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=1e-12)


def test_a_motion_that_ends(library, tmp_path):
    arguments = ("state", "n_times", "times", "states", "ended")
    adapter = load_adapter("library")
    settings = adapter.Settings(
        library=str(library), function="until_one", arguments=arguments, lost_code=7
    )
    propagator = adapter.build(settings, context(tmp_path, sources=()))
    batch = oscillator_batch(1)
    batch = Batch(np.array([[0.0, 0.8]]), batch.times, batch.forcing, batch.parameters)
    found = propagator.propagate(batch)
    np.testing.assert_allclose(found.ended, [1 + 1 / 0.8])
    assert np.isfinite(found.states[0, :3]).all()


def test_an_error_code_and_a_crash_cost_one_run(library, tmp_path):
    batch = oscillator_batch(6)
    parameters = batch.parameters.copy()
    parameters[1], parameters[4] = -1.0, -100.0
    batch = Batch(batch.states, batch.times, batch.forcing, parameters)
    propagator = made(library, tmp_path)
    with pytest.raises(PropagatorError, match="propagate returned 5"):
        propagator.propagate(batch.take(slice(1, 2)))
    with Ledger.open(tmp_path / "work") as ledger, Engine(propagator, ledger, n_jobs=2) as engine:
        outcomes = engine.run(batch, "runs")
    assert outcomes.ok.tolist() == [True, False, True, True, False, True]
    assert "returned 5" in outcomes.reasons[1]
    assert "SIGABRT" in outcomes.reasons[4]
    good = batch.take(np.flatnonzero(outcomes.ok))
    np.testing.assert_allclose(outcomes.states[outcomes.ok], oscillator(good), atol=ACCURACY)


def test_a_library_that_cannot_be_used_is_told(library, tmp_path):
    with pytest.raises(InputError, match=r"there is no library 'gone\.so'"):
        made("gone.so", tmp_path)
    with pytest.raises(InputError, match="has no function 'orbit'"):
        made(library, tmp_path, "orbit")
    text = tmp_path / "text.so"
    text.write_text("not a library")
    with pytest.raises(InputError, match=r"text\.so cannot be loaded: .*"):
        made(text, tmp_path)
    with pytest.raises(InputError, match="the function is not given them"):
        made(library, tmp_path, "nothing", ("state", "n_times", "times", "states"))


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"arguments": (*ONE, "state")}, "'state' is passed twice"),
        ({"arguments": (*ONE, "final")}, "one of states"),
        ({"arguments": ("state", "states")}, "must be passed times"),
        ({"arguments": ("times", "states")}, "must be passed state"),
        ({"arguments": ("state", "orbit")}, "arguments"),
        ({"forcing_step": None}, "needs forcing_step"),
        ({"lost_code": 0}, "must differ from 0"),
        ({"lost_code": 7}, "pass `ended` too"),
        ({"lost_code": 7, "returns": "nothing"}, "returns a code"),
        ({"function": "a b"}, "function"),
    ],
)
def test_settings_that_cannot_be(change, said):
    given = {"library": "a.so", "function": "f", "arguments": ONE, "forcing_step": 0.1} | change
    with pytest.raises(ValueError, match=said):
        load_adapter("library").Settings(**given)
