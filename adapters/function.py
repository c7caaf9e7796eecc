"""f(x0, times, forcing, parameters) -> (len(times), d): a Python function as it is."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.reference import Reference, check_reference, code_digest, load_function
from nipc.arrays import FloatArray
from nipc.errors import PropagatorError
from nipc.problem.noise import Forcing
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories


class FunctionSettings(AdapterSettings):
    """`batch`: the function takes all runs at once, x0 (n, d) -> (n, len(times), d).

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

    def propagate(self, batch: Batch) -> Trajectories:
        function = load_function(self.folder, self.settings.function)
        states, times = batch.states, batch.times
        if self.vectorised:
            result = function(states.copy(), times.copy(), batch.forcing, batch.parameters.copy())
            wanted = (len(batch), times.size, states.shape[1])
            return Trajectories.complete(_shaped(result, wanted))
        result = function(
            states[0].copy(), times.copy(), OnePath(batch.forcing), batch.parameters[0].copy()
        )
        return Trajectories.complete(_shaped(result, (times.size, states.shape[1]))[None])

    def fingerprint(self) -> str:
        code = code_digest(self.folder, [self.settings.function], self.settings.depends)
        return f"function {self.settings.model_dump_json()} {code}"


def _shaped(result: Any, wanted: tuple[int, ...]) -> FloatArray:
    try:
        array = np.asarray(result, dtype=float)
    except (TypeError, ValueError) as error:
        raise PropagatorError(f"the function did not return numbers: {error}") from None
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

    @classmethod
    def build(cls, settings: FunctionSettings, context: AdapterContext) -> Propagator:
        load_function(context.folder, settings.function)
        return FunctionPropagator(settings, context.folder)
