"""A program that stays: its answers, its deaths, and what it says that it should not."""

import copy
import time

import numpy as np
import pytest
from adapters_samples import build, one_by_one, oscillator, oscillator_batch

from nipc.errors import InputError, PropagatorError
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger

ACCURACY = 1e-6  # Runge-Kutta of order four: T h^4 / 120 times a fifth derivative of about 3


@pytest.fixture
def made(compiled, tmp_path):
    program = compiled("loop.c")
    known = []

    def make(*way, step=0.025, **more):
        propagator = build(
            "persistent", tmp_path, command=(str(program), *way), forcing_step=step, **more
        )
        known.append(propagator)
        return propagator

    yield make
    for propagator in known:
        propagator.close()


def test_many_runs_of_one_program(made):
    batch = oscillator_batch(20)
    propagator = made()
    states, _ = one_by_one(propagator, batch.take(slice(0, 10)))
    process = propagator._process
    more, _ = one_by_one(propagator, batch.take(slice(10, 20)))
    assert propagator._process is process
    np.testing.assert_allclose(np.concatenate([states, more]), oscillator(batch), atol=ACCURACY)


def test_in_workers(made, tmp_path):
    batch = oscillator_batch(12)
    with Ledger.open(tmp_path / "work") as ledger, Engine(made(), ledger, n_jobs=2) as engine:
        outcomes = engine.run(batch, "runs")
    np.testing.assert_allclose(outcomes.states, oscillator(batch), atol=ACCURACY)


def test_it_travels_without_its_process(made):
    propagator = made()
    propagator.propagate(oscillator_batch(1))
    assert copy.copy(propagator)._process is None


def test_a_request_longer_than_a_pipe(made):
    """A table of 180,001 rows is some five megabytes; a pipe holds 64 kB."""
    batch = oscillator_batch(1)
    states = made(step=3.0 / 180_000).propagate(batch).states
    np.testing.assert_allclose(states, oscillator(batch), atol=1e-9)


def test_an_ending(made):
    batch = oscillator_batch(1)
    found = made("ended").propagate(batch)
    np.testing.assert_allclose(found.ended, [1.1])
    assert found.states[0, 0].tolist() == batch.states[0].tolist()
    assert np.isnan(found.states[0, 1:]).all()


@pytest.mark.parametrize(
    ("way", "said"),
    [
        ("leave", "the program ended instead of answering"),
        ("die", "the program ended with exit code 9: no beam"),
        ("chat", "answered 'hello'|more than one line"),
        ("error", "^the magnet is off$"),
        ("short", "answered 13 numbers; 7 times x 2 state components = 14"),
    ],
)
def test_what_is_wrong_is_told_and_the_next_run_is_asked_again(way, said, made):
    propagator, batch = made(way), oscillator_batch(1)
    for _ in range(2):
        with pytest.raises(PropagatorError, match=said):
            propagator.propagate(batch)


def test_one_that_does_not_answer_is_stopped(made):
    propagator = made("hang", time_limit=0.3)
    began = time.monotonic()
    with pytest.raises(PropagatorError, match=r"did not answer within 0\.3 s"):
        propagator.propagate(oscillator_batch(1))
    assert time.monotonic() - began < 10
    assert propagator._process is None


def test_a_noise_that_it_would_not_hear_is_refused(made):
    with pytest.raises(InputError, match="give forcing_step"):
        made(step=None)
