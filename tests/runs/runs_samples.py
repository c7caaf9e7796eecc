"""Propagators that behave well or badly on demand, and batches for them."""

from __future__ import annotations

import ctypes
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np

from nipc.errors import PropagatorError
from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import Batch, Propagator, Trajectories

GOOD, RAISES, EXITS, SEGFAULTS, SLEEPS, DEAF, NAN, SHAPE, MEMORY, LEAVES, REFUSES, ENDS, CALLS = (
    range(13)
)


class Sample(Propagator):
    """x(t) = start + int xi dt, after what the first parameter asks for.

    With `mixing`, runs of one call influence each other in the last digits, as those of an
    integrator with one step size for all do. Each call leaves a line in `log`.
    """

    def __init__(
        self,
        *,
        vectorised: bool = False,
        mixing: bool = False,
        pause: float = 0.0,
        log: Path | None = None,
        name: str = "sample",
    ) -> None:
        self.vectorised = vectorised
        self.mixing, self.pause, self.log, self.name = mixing, pause, log, name

    def propagate(self, batch: Batch) -> Trajectories:
        if self.log is not None:
            with self.log.open("a") as file:
                file.write(f"{os.getpid()} {len(batch)}\n")
        time.sleep(self.pause)
        what = int(batch.parameters[:, 0].max(initial=0.0)) if batch.parameters.size else GOOD
        misbehave(what)
        path = np.zeros((len(batch), batch.times.size, batch.states.shape[1]))
        path[:, 1:, 0] = np.cumsum(batch.forcing.increments(batch.times)[:, :, 0], axis=1)
        states = batch.states[:, None, :] + path
        if self.mixing:
            states = states * (1.0 + 1e-13 * np.sum(batch.states))
        ended = np.full(len(batch), np.nan)
        if what == NAN:
            states[batch.parameters[:, 0] == NAN, -1, 0] = np.nan
        if what == SHAPE:
            states = states[:, :-1]
        if what == ENDS:
            ended[:] = batch.times[1]
            states[:, 2:] = 1e300
        return Trajectories(states, ended)

    def fingerprint(self) -> str:
        return self.name


def misbehave(what: int) -> None:
    """What real propagators do on a bad day."""
    if what == RAISES:
        raise ValueError("the orbit is hyperbolic")
    if what == REFUSES:
        raise PropagatorError("step size below the smallest at t = 0.25")
    if what == EXITS:
        os._exit(3)
    if what == SEGFAULTS:
        ctypes.string_at(0)
    if what == SLEEPS:
        time.sleep(600)
    if what == DEAF:
        signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGALRM})
        time.sleep(600)
    if what == CALLS:  # a program in a session of its own, as an adapter would start it
        subprocess.run(["sleep", "600.25"], start_new_session=True)
    if what == MEMORY:
        np.ones(1 << 46)
    if what == LEAVES:
        sys.exit("bye")


def sample_batch(
    n: int, *, kinds: dict[int, int] | None = None, times: int = 6, seed: int = 1
) -> Batch:
    """n runs of two states and one white source; `kinds` says which row does what."""
    rng = np.random.default_rng(seed)
    model = NoiseModel((Source("push", "m/s^1.5", 1.0),), (Legendre(3),), 0.0, 1.0)
    parameters = np.zeros((n, 1))
    for row, kind in (kinds or {}).items():
        parameters[row] = kind
    return Batch(
        rng.normal(size=(n, 2)),
        np.linspace(0.0, 1.0, times),
        model.realise(rng.normal(size=(n, model.size))),
        parameters,
    )


def expected_states(batch: Batch) -> np.ndarray:
    """What `Sample` should answer for good runs, written another way: start + sum_k Z_k F_k(t)."""
    basis = Legendre(3)
    running = basis.integrals(batch.times)  # the arc is [0, 1] and the intensity 1
    states = np.repeat(batch.states[:, None, :], batch.times.size, axis=1)
    states[:, :, 0] += batch.forcing.coefficients @ running
    return states


def alive(pid: int) -> bool:
    """Whether a process exists and is no zombie."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except OSError:
        return False


def eventually(condition: object, seconds: float = 10.0) -> bool:
    """Whether a condition comes true in time."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if condition():  # type: ignore[operator]
            return True
        time.sleep(0.02)
    return False
