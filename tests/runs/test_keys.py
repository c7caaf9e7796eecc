"""Two runs share a key exactly when the propagator would be asked the same, bit for bit."""

import hashlib
from dataclasses import replace

import numpy as np
import pytest
from runs_samples import sample_batch

from nipc.problem.noise import KarhunenLoeve
from nipc.runs.keys import run_keys


def test_a_key_is_the_hash_it_is_said_to_be():
    """Built once more from the words of the docstring, with struct-like bytes by hand."""
    batch = sample_batch(3)
    parts = [b"code", batch.forcing.digest(), batch.times.astype("<f8").tobytes(), b"(2, 3, 1)"]
    shared = hashlib.sha256(
        b"nipc run key 1" + b"".join(len(part).to_bytes(8, "little") + part for part in parts)
    ).digest()
    row = np.r_[batch.states[1], batch.forcing.coefficients[1], batch.parameters[1]]
    assert run_keys(batch, "code")[1] == hashlib.sha256(shared + row.tobytes()).digest()


def test_keys_do_not_depend_on_company():
    batch = sample_batch(9)
    keys = run_keys(batch, "code")
    assert len(set(keys)) == 9
    assert run_keys(batch.take(np.array([7, 2])), "code") == [keys[7], keys[2]]


def _other_time(batch):
    times = batch.times.copy()
    times[-1] = np.nextafter(times[-1], 2.0)
    return replace(batch, times=times)


def _bumped(values):
    return np.nextafter(values, np.inf)


@pytest.mark.parametrize(
    "change",
    [
        _other_time,
        lambda b: replace(b, states=_bumped(b.states)),
        lambda b: replace(b, parameters=_bumped(b.parameters)),
        lambda b: replace(b, forcing=b.forcing.model.realise(_bumped(b.forcing.coefficients))),
        lambda b: replace(
            b,
            forcing=replace(b.forcing.model, bases=(KarhunenLoeve(3),)).realise(
                b.forcing.coefficients
            ),
        ),
        lambda b: replace(
            b, forcing=replace(b.forcing.model, end=1.5).realise(b.forcing.coefficients)
        ),
    ],
    ids=["times", "states", "parameters", "coefficients", "basis", "arc"],
)
def test_the_last_bit_of_anything_changes_the_key(change):
    batch = sample_batch(2)
    assert not set(run_keys(batch, "code")) & set(run_keys(change(batch), "code"))


def test_the_propagator_changes_the_key():
    batch = sample_batch(2)
    assert not set(run_keys(batch, "code 1")) & set(run_keys(batch, "code 2"))


def test_a_column_that_moves_from_state_to_parameters_changes_the_key():
    batch = sample_batch(2)
    moved = replace(
        batch,
        states=batch.states[:, :1],
        parameters=np.concatenate([batch.states[:, 1:], batch.parameters], axis=1),
    )
    assert not set(run_keys(batch, "code")) & set(run_keys(moved, "code"))
