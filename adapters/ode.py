"""x' = f(t, x, xi(t), parameters): a right-hand side in Python, integrated by scipy or in batch."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field, model_validator

from nipc.adapters.adaptive import Adaptive
from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.fixed_step import integrate
from nipc.adapters.reference import (
    Reference,
    check_depends,
    check_reference,
    code_digest,
    load_function,
)
from nipc.errors import InputError
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Tolerance = Annotated[float, Field(gt=0, lt=1)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class OdeSettings(AdapterSettings):
    """Integrator of the right-hand side.

    With batch = true rhs is called once for all runs, x (n, d), xi (n, J), parameters (n, P) ->
    (n, d). scipy's adaptive methods choose common steps by the worst run; "rk4" and "rk8" take
    fixed steps of at most `step`, and no run's numbers depend on the others. `stop` is a function
    of (t, x, parameters) -> a number a run, at whose zero the motion ends for a physical reason
    (re-entry, loss).
    """

    rhs: Reference
    batch: bool = False
    method: Literal["DOP853", "RK45", "RK23", "LSODA", "Radau", "BDF", "rk4", "rk8"] = "DOP853"
    rtol: Tolerance = 1e-9
    atol: Positive | list[Positive] = 1e-12
    max_step: Positive | None = None
    step: Positive | None = None
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
        if self.fixed and self.max_step is not None:
            raise ValueError(f'method = "{self.method}" takes fixed steps: give step, not max_step')
        return self


class OdePropagator(Propagator):
    """Integrates the user's right-hand side; it is imported where it runs."""

    def __init__(self, settings: OdeSettings, folder: Path) -> None:
        self.settings, self.folder = settings, folder
        self.vectorised = settings.batch

    def __setstate__(self, state: dict[str, Any]) -> None:
        # a worker imports the user's module as it starts, before any run's time limit counts
        self.__dict__.update(state)
        with contextlib.suppress(InputError):
            load_function(self.folder, self.settings.rhs)

    def propagate(self, batch: Batch) -> Trajectories:
        settings = self.settings
        rates = load_function(self.folder, settings.rhs)
        stop = None if settings.stop is None else load_function(self.folder, settings.stop)
        if not settings.batch:
            rates, stop = _row_by_row(rates), None if stop is None else _row_by_row(stop)
        if settings.fixed:
            assert settings.step is not None
            return integrate(rates, batch, settings.method, settings.step, stop)
        return Adaptive(
            rates, stop, settings.method, settings.rtol, np.asarray(settings.atol),
            settings.max_step or np.inf,
        ).integrate(batch)  # fmt: skip

    def fingerprint(self) -> str:
        references = [r for r in (self.settings.rhs, self.settings.stop) if r is not None]
        code = code_digest(self.folder, references, self.settings.depends)
        return f"ode {self.settings.model_dump_json()} {code}"


def _row_by_row(function: Callable[..., Any]) -> Callable[..., Any]:
    """A function of one run as a function of a batch of one."""
    return lambda t, *arrays: np.asarray(function(t, *(a[0] for a in arrays)))[None]


class OdeAdapter(Adapter):
    """A right-hand side in Python."""

    name = "ode"
    Settings = OdeSettings

    @classmethod
    def check(cls, settings: OdeSettings, context: AdapterContext) -> None:
        for reference in (settings.rhs, settings.stop):
            if reference is not None:
                check_reference(context.folder, reference)
        check_depends(context.folder, settings.depends)
        count = len(context.state_names)
        if isinstance(settings.atol, list) and len(settings.atol) != count:
            raise InputError(
                f"atol has {len(settings.atol)} values for {count} state components; give one "
                "number, or one for each in the state's order"
            )

    @classmethod
    def build(cls, settings: OdeSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        for reference in (settings.rhs, settings.stop):
            if reference is not None:
                load_function(context.folder, reference)
        return OdePropagator(settings, context.folder)
