"""x_{k+1} = F(k, x_k, w_k, parameters): a motion that goes in steps, such as turn by turn."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import numpy as np
from pydantic import Field

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.reference import (
    Reference,
    check_depends,
    check_reference,
    code_digest,
    load_function,
)
from nipc.arrays import FloatArray, IntArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

CHUNK = 2_000_000  # increments made at once


class MapSettings(AdapterSettings):
    """`map` is a function of (k, x, w, parameters) that returns the next x.

    A step lasts `step` of the clock's unit, k counts steps from `origin`, and w is the integral of
    each noise source over the step. `lost` (x, parameters) -> true where the motion has ended.
    With batch = true all have a leading axis of runs: x (n, d), w (n, J).
    """

    map: Reference
    batch: bool = False
    step: Annotated[float, Field(gt=0, allow_inf_nan=False)] = 1.0
    origin: float = 0.0
    lost: Reference | None = None
    depends: tuple[str, ...] = ()


class MapPropagator(Propagator):
    """Calls the user's map; it is imported where it runs."""

    def __init__(self, settings: MapSettings, folder: Path) -> None:
        self.settings, self.folder = settings, folder
        self.vectorised = settings.batch

    def propagate(self, batch: Batch) -> Trajectories:
        settings, (n, d) = self.settings, batch.states.shape
        step = load_function(self.folder, settings.map)
        lost = None if settings.lost is None else load_function(self.folder, settings.lost)
        counts = self._counts(batch.times)
        states, ended = np.full((n, counts.size, d), np.nan), np.full(n, np.nan)
        states[:, 0] = batch.states
        x, alive = batch.states.copy(), np.ones(n, dtype=bool)
        width = max(1, CHUNK // (n * max(1, batch.forcing.n_sources)))
        last, place = int(counts[-1]), 1
        for first in range(int(counts[0]), last, width):
            ks = np.arange(first, min(first + width, last) + 1)
            kicks = batch.forcing.increments(self._times(ks))
            for k in ks[:-1]:
                w = kicks[:, k - first]
                x = np.where(alive[:, None], self._next(step, int(k), x, w, batch), x)
                if lost is not None:
                    gone = alive & self._lost(lost, x, batch)
                    # it was still there at the beginning of the step
                    ended[gone] = self._times(ks[:1] + (k - first))[0]
                    alive &= ~gone
                if k + 1 == counts[place]:
                    states[alive, place] = x[alive]
                    place += 1
            if not alive.any():
                break
        return Trajectories(states, ended)

    def _times(self, ks: IntArray) -> FloatArray:
        return self.settings.origin + self.settings.step * ks

    def _counts(self, times: FloatArray) -> IntArray:
        """Which step begins at each time."""
        exact = (times - self.settings.origin) / self.settings.step
        counts = np.rint(exact).astype(np.int64)
        off = np.abs(exact - counts) > 1e-6
        if off.any():
            raise PropagatorError(
                f"t = {times[int(np.argmax(off))]:g} lies inside a step: a map knows only times "
                f"{self.settings.origin:g} + k x {self.settings.step:g}; choose outputs and arcs so"
            )
        return counts

    def _next(self, step: Any, k: int, x: FloatArray, w: FloatArray, batch: Batch) -> FloatArray:
        if self.vectorised:
            value = np.asarray(step(k, x, w, batch.parameters), dtype=float)
        else:
            value = np.asarray(step(k, x[0], w[0], batch.parameters[0]), dtype=float)[None]
        if value.shape != x.shape:
            wanted = x.shape if self.vectorised else x.shape[1:]
            found = value.shape if self.vectorised else value.shape[1:]
            raise PropagatorError(f"the map returned shape {found}; it must be {wanted}")
        return value

    def _lost(self, lost: Any, x: FloatArray, batch: Batch) -> Any:
        if self.vectorised:
            value = np.asarray(lost(x, batch.parameters))
        else:
            value = np.asarray([lost(x[0], batch.parameters[0])])
        if value.shape != x.shape[:1]:
            raise PropagatorError(
                f"lost returned shape {value.shape}; it must be {x.shape[:1]}: yes or no a run"
            )
        return value.astype(bool)

    def fingerprint(self) -> str:
        references = [r for r in (self.settings.map, self.settings.lost) if r is not None]
        code = code_digest(self.folder, references, self.settings.depends)
        return f"map {self.settings.model_dump_json()} {code}"


class MapAdapter(Adapter):
    """A discrete map in Python."""

    name = "map"
    Settings = MapSettings

    @classmethod
    def check(cls, settings: MapSettings, context: AdapterContext) -> None:
        for reference in (settings.map, settings.lost):
            if reference is not None:
                check_reference(context.folder, reference)
        check_depends(context.folder, settings.depends)

    @classmethod
    def build(cls, settings: MapSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        for reference in (settings.map, settings.lost):
            if reference is not None:
                load_function(context.folder, reference)
        return MapPropagator(settings, context.folder)
