"""One call of the propagator, and what is checked of its answer."""

from __future__ import annotations

import contextlib
import signal
import threading
import time
import traceback
from collections.abc import Iterator
from dataclasses import dataclass
from types import FrameType

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import Batch, Propagator, Trajectories


@dataclass(frozen=True)
class Problem:
    """Why a run failed: a word to count by, and a sentence."""

    kind: str
    reason: str


@dataclass(frozen=True, eq=False)
class Unit:
    """Rows of a batch that are propagated in one call."""

    rows: IntArray
    attempt: int = 1

    def __len__(self) -> int:
        return int(self.rows.size)


@dataclass(frozen=True, eq=False)
class Answer:
    """What became of a unit.

    `states` (k, m, d) and `ended` (k,) are None when the call as a whole failed; `problems` has
    one entry a row, None where the run is good; `seconds` is the time of the call over k.
    """

    unit: Unit
    states: FloatArray | None
    ended: FloatArray | None
    problems: tuple[Problem | None, ...]
    seconds: float
    host: str = ""

    @classmethod
    def failure(cls, unit: Unit, problem: Problem, seconds: float, host: str = "") -> Answer:
        """Every run of the unit failed for one cause."""
        return cls(unit, None, None, (problem,) * len(unit), seconds / max(len(unit), 1), host)


class TimeLimit(BaseException):
    """Raised inside a propagator that takes too long; no ordinary `except` catches it."""


def call(
    propagator: Propagator, batch: Batch, unit: Unit, limit: float | None, host: str = ""
) -> Answer:
    """Propagate the unit's rows, `batch` holding only them; what goes wrong becomes its answer.

    `limit` is in seconds for each run.
    """
    began = time.perf_counter()
    try:
        with alarm(None if limit is None else limit * len(unit)):
            found = propagator.propagate(batch)
        seconds = time.perf_counter() - began
        problem = _wrong_shape(found, batch)
        if problem is not None:
            return Answer.failure(unit, problem, seconds, host)
        states, ended, problems = _examined(found, batch)
        return Answer(unit, states, ended, problems, seconds / len(unit), host)
    except TimeLimit:
        problem = time_limit_problem(limit)
    except KeyboardInterrupt:
        raise
    except PropagatorError as error:
        problem = Problem("propagator", str(error) or "the propagator gave no reason")
    except MemoryError:
        problem = Problem("memory", "not enough memory for the run")
    except BaseException as error:
        problem = Problem("exception", _described(error))
    return Answer.failure(unit, problem, time.perf_counter() - began, host)


def time_limit_problem(limit: float | None) -> Problem:
    """The run was stopped."""
    return Problem("time limit", f"longer than the time limit of {limit:g} s")


@contextlib.contextmanager
def alarm(limit: float | None) -> Iterator[None]:
    """Raise TimeLimit in the block after `limit` seconds, and again each second after that.

    Works in the main thread of a process on POSIX, and where the interpreter gets a turn;
    elsewhere the block is not limited.
    """
    able = hasattr(signal, "setitimer") and threading.current_thread() is threading.main_thread()
    if limit is None or not able:
        yield
        return

    def ring(number: int, frame: FrameType | None) -> None:
        raise TimeLimit

    before = signal.signal(signal.SIGALRM, ring)
    signal.setitimer(signal.ITIMER_REAL, max(limit, 1e-3), 1.0)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGALRM, before)


def _wrong_shape(found: object, batch: Batch) -> Problem | None:
    """Whether the answer has the form that was asked for."""
    if not isinstance(found, Trajectories):
        return Problem("shape", f"the propagator returned {type(found).__name__}, not Trajectories")
    wanted = (len(batch), batch.times.size, batch.states.shape[1])
    if np.shape(found.states) != wanted:
        return Problem(
            "shape",
            f"the propagator returned states of shape {np.shape(found.states)}; right is {wanted}:"
            " (runs, times, state components)",
        )
    if np.shape(found.ended) != wanted[:1]:
        return Problem(
            "shape", f"`ended` has shape {np.shape(found.ended)}; right is {wanted[:1]}: (runs,)"
        )
    return None


def _examined(
    found: Trajectories, batch: Batch
) -> tuple[FloatArray, FloatArray, tuple[Problem | None, ...]]:
    """States, NaN after each ending, and a problem for each run with other non-finite values."""
    states = np.array(found.states, dtype=np.float64, order="C")
    ended = np.array(found.ended, dtype=np.float64)
    after = batch.times[None, :] > ended[:, None]  # never where `ended` is NaN
    states[after] = np.nan
    bad = ~np.isfinite(states).all(axis=2) & ~after
    problems: list[Problem | None] = [None] * len(batch)
    for row in np.flatnonzero(bad.any(axis=1)):
        time_of = float(batch.times[int(np.argmax(bad[row]))])
        problems[row] = Problem("not finite", f"the state is not finite at t = {time_of:g}")
    return states, ended, tuple(problems)


def _described(error: BaseException) -> str:
    """Type, message and the innermost place in the user's code."""
    text = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
    frames = traceback.extract_tb(error.__traceback__)[1:]
    if frames:
        text += f" ({frames[-1].filename.rsplit('/', 1)[-1]}, line {frames[-1].lineno})"
    return text
