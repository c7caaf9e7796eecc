"""f(x0, times, forcing, parameters) -> (len(times), d): a Python function as it is."""

from __future__ import annotations

import contextlib
from pathlib import Path
from typing import Any

import numpy as np

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.endings import until
from nipc.adapters.reference import (
    Reference,
    check_depends,
    check_reference,
    code_digest,
    load_function,
)
from nipc.arrays import FloatArray
from nipc.errors import Ended, InputError, PropagatorError
from nipc.problem.noise import Forcing
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories


class FunctionSettings(AdapterSettings):
    """`batch`: the function takes all runs at once, x0 (n, d) -> (n, len(times), d).

    A function whose motion ended for a physical reason raises nipc.Ended(time, states) or returns
    (states, time of the end); in a batch (states, times (n,), NaN where none ended).
    `depends`: other files whose change makes kept runs out of date.
    """

    function: Reference
    batch: bool = False
    depends: tuple[str, ...] = ()


class OnePath:
    """One realised path of the noise: forcing(t) -> (J,), forcing.table(times) -> (T, J)."""

    def __init__(self, forcing: Forcing) -> None:
        self._forcing = forcing
        self.names = forcing.names

    def __call__(self, t: float) -> FloatArray:
        return self._forcing(t)[0]

    def table(self, times: FloatArray) -> FloatArray:
        """xi at times (T,): (T, J)."""
        return self._forcing.table(times)[0]

    def increments(self, times: FloatArray) -> FloatArray:
        """Integral of xi over each interval of times (T,): (T - 1, J)."""
        return self._forcing.increments(times)[0]


class FunctionPropagator(Propagator):
    """Calls the user's function; it is imported where it runs."""

    def __init__(self, settings: FunctionSettings, folder: Path) -> None:
        self.settings, self.folder = settings, folder
        self.vectorised = settings.batch

    def __setstate__(self, state: dict[str, Any]) -> None:
        # a worker imports the user's module as it starts, before any run's time limit counts
        self.__dict__.update(state)
        with contextlib.suppress(InputError):
            load_function(self.folder, self.settings.function)

    def propagate(self, batch: Batch) -> Trajectories:
        function = load_function(self.folder, self.settings.function)
        return self._batch(function, batch) if self.vectorised else self._single(function, batch)

    def _single(self, function: Any, batch: Batch) -> Trajectories:
        times, d = batch.times, batch.states.shape[1]
        try:
            result = function(
                batch.states[0].copy(), times.copy(), OnePath(batch.forcing),
                batch.parameters[0].copy(),
            )  # fmt: skip
        except Ended as end:
            result = (end.states if end.states is not None else batch.states, end.time)
        states, ended = _parted(result, 2)
        if ended is None:
            return Trajectories.complete(_shaped(states, (times.size, d))[None])
        time = float(ended)
        rows = _numbers(states)
        if rows.ndim != 2 or rows.shape[1] != d or rows.shape[0] > times.size:
            raise PropagatorError(
                f"the function returned states of shape {rows.shape} for a motion that ended; "
                f"right is (k, {d}), the first k of {times.size} times"
            )
        return Trajectories(until(rows, times, time)[None], np.array([time]))

    def _batch(self, function: Any, batch: Batch) -> Trajectories:
        result = function(
            batch.states.copy(), batch.times.copy(), batch.forcing, batch.parameters.copy()
        )
        states, ended = _parted(result, 3)
        shaped = _shaped(states, (len(batch), batch.times.size, batch.states.shape[1]))
        if ended is None:
            return Trajectories.complete(shaped)
        return Trajectories(shaped, _shaped(ended, (len(batch),)))

    def fingerprint(self) -> str:
        code = code_digest(self.folder, [self.settings.function], self.settings.depends)
        return f"function {self.settings.model_dump_json()} {code}"


def _parted(result: Any, axes: int) -> tuple[Any, Any]:
    """(states, ended) where the function returned both, else (states, None)."""
    if isinstance(result, tuple) and len(result) == 2 and np.ndim(result[0]) == axes:
        return result
    return result, None


def _numbers(result: Any) -> FloatArray:
    try:
        return np.asarray(result, dtype=float)
    except (TypeError, ValueError) as error:
        raise PropagatorError(f"the function did not return numbers: {error}") from None


def _shaped(result: Any, wanted: tuple[int, ...]) -> FloatArray:
    array = _numbers(result)
    if array.shape != wanted:
        raise PropagatorError(f"the function returned shape {array.shape}; it must be {wanted}")
    return array


class FunctionAdapter(Adapter):
    """A Python function, one run or a whole batch."""

    name = "function"
    Settings = FunctionSettings

    @classmethod
    def check(cls, settings: FunctionSettings, context: AdapterContext) -> None:
        check_reference(context.folder, settings.function)
        check_depends(context.folder, settings.depends)

    @classmethod
    def build(cls, settings: FunctionSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        load_function(context.folder, settings.function)
        return FunctionPropagator(settings, context.folder)
