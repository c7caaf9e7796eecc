"""x' = f(t, x, xi(t), parameters): a right-hand side in Python, integrated by scipy or in batch."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field, model_validator

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.fixed_step import integrate
from nipc.adapters.reference import Reference, check_reference, code_digest, load_function
from nipc.arrays import FloatArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Tolerance = Annotated[float, Field(gt=0, lt=1)]


class OdeSettings(AdapterSettings):
    """Integrator of the right-hand side.

    scipy's adaptive methods take one run at a time. "rk4" and "rk8" take fixed steps of at most
    `step`; with batch = true they call rhs once for all runs, x (n, d), xi (n, J) -> (n, d), and no
    run's numbers depend on the others. `stop` is a function of (t, x, parameters) at whose zero the
    motion ends for a physical reason (re-entry, loss).
    """

    rhs: Reference
    batch: bool = False
    method: Literal["DOP853", "RK45", "RK23", "LSODA", "Radau", "BDF", "rk4", "rk8"] = "DOP853"
    rtol: Tolerance = 1e-9
    atol: Annotated[float, Field(gt=0)] | list[Annotated[float, Field(gt=0)]] = 1e-12
    max_step: Annotated[float, Field(gt=0)] | None = None
    step: Annotated[float, Field(gt=0)] | None = None
    stop: Reference | None = None
    depends: tuple[str, ...] = ()

    @property
    def fixed(self) -> bool:
        return self.method in ("rk4", "rk8")

    @model_validator(mode="after")
    def _consistent(self) -> OdeSettings:
        if self.fixed and self.step is None:
            raise ValueError(
                f'method = "{self.method}" takes fixed steps: give step, in the clock\'s unit'
            )
        if not self.fixed and self.step is not None:
            raise ValueError(
                f'method = "{self.method}" chooses its own steps: leave step out, or give max_step'
            )
        if self.batch and not self.fixed:
            raise ValueError('batch = true needs fixed steps: method = "rk8" and a step')
        if self.stop is not None and self.fixed:
            raise ValueError("stop needs one of scipy's methods, which find the time of the event")
        return self


class OdePropagator(Propagator):
    """Integrates the user's right-hand side; it is imported where it runs."""

    def __init__(self, settings: OdeSettings, folder: Path) -> None:
        self.settings, self.folder = settings, folder
        self.vectorised = settings.batch

    def propagate(self, batch: Batch) -> Trajectories:
        rhs = load_function(self.folder, self.settings.rhs)
        if self.settings.fixed:
            assert self.settings.step is not None
            function = rhs if self.settings.batch else _row_by_row(rhs)
            return Trajectories.complete(
                integrate(function, batch, self.settings.method, self.settings.step)
            )
        return self._adaptive(rhs, batch)

    def _adaptive(self, rhs: Callable[..., Any], batch: Batch) -> Trajectories:
        from scipy.integrate import solve_ivp

        settings, times, start = self.settings, batch.times, batch.states[0]
        forcing, parameters = batch.forcing, batch.parameters[0]

        def right(t: float, x: FloatArray) -> Any:
            return rhs(t, x, forcing(t)[0], parameters)

        events = None
        if settings.stop is not None:
            stop = load_function(self.folder, settings.stop)

            def events(t: float, x: FloatArray) -> float:
                return float(stop(t, x, parameters))

            events.terminal = True  # type: ignore[attr-defined]
        method: Any = settings.method
        solution = solve_ivp(
            right, (times[0], times[-1]), start, method, t_eval=times, events=events,
            rtol=settings.rtol, atol=settings.atol, max_step=settings.max_step or np.inf,
        )  # fmt: skip
        if solution.status == -1:
            raise PropagatorError(f"the integrator gave up: {solution.message}")
        states = np.full((1, times.size, start.size), np.nan)
        states[0, : solution.y.shape[1]] = solution.y.T
        ended = np.full(1, np.nan)
        if solution.status == 1 and solution.t_events is not None:
            ended[0] = float(solution.t_events[0][0])
        return Trajectories(states, ended)

    def fingerprint(self) -> str:
        references = [r for r in (self.settings.rhs, self.settings.stop) if r is not None]
        code = code_digest(self.folder, references, self.settings.depends)
        return f"ode {self.settings.model_dump_json()} {code}"


def _row_by_row(rhs: Callable[..., Any]) -> Callable[..., Any]:
    return lambda t, x, xi, parameters: np.asarray(rhs(t, x[0], xi[0], parameters[0]))[None]


class OdeAdapter(Adapter):
    """A right-hand side in Python."""

    name = "ode"
    Settings = OdeSettings

    @classmethod
    def check(cls, settings: OdeSettings, context: AdapterContext) -> None:
        for reference in (settings.rhs, settings.stop):
            if reference is not None:
                check_reference(context.folder, reference)

    @classmethod
    def build(cls, settings: OdeSettings, context: AdapterContext) -> Propagator:
        load_function(context.folder, settings.rhs)
        return OdePropagator(settings, context.folder)
