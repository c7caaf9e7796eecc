"""scipy's adaptive integrators for one run or many, with endings found on the dense output."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import Batch, Trajectories

Rates = Callable[[float, FloatArray, FloatArray, FloatArray], Any]
Stop = Callable[[float, FloatArray, FloatArray], Any]


class Adaptive:
    """x' = rates(t, x, xi, p), all runs as one system of n d components.

    scipy takes the root mean square of error / (atol + rtol |x|) over all components, in which one
    bad run among n hides by a factor of sqrt(n) at most: both tolerances are divided by that, and
    every run is as accurate as it would be alone. `stop` (t, x, p) -> (n,): a run ends at its zero.
    """

    def __init__(
        self,
        rates: Rates,
        stop: Stop | None,
        method: str,
        rtol: float,
        atol: FloatArray,
        max_step: float,
    ) -> None:
        self.rates, self.stop, self.method = rates, stop, method
        self.rtol, self.atol, self.max_step = rtol, atol, max_step

    def integrate(self, batch: Batch) -> Trajectories:
        """Trajectories of the batch; PropagatorError when the steps become too small."""
        times, (n, d) = batch.times, batch.states.shape
        states, ended = np.full((n, times.size, d), np.nan), np.full(n, np.nan)
        states[:, 0] = batch.states
        alive = np.ones(n, dtype=bool)
        system = _System(self.rates, batch, alive)
        # scipy would look for a first step for ever
        if not np.isfinite(system(times[0], batch.states.ravel())).all():
            raise PropagatorError(f"rhs is not finite at the start, t = {times[0]:g}")
        solver = self._solver(system, times[0], batch.states.ravel(), times[-1], None)
        side = self._sides(times[0], batch.states, batch.parameters)
        reached = 1
        while reached < times.size and alive.any():
            message = solver.step()
            if solver.status == "failed":
                hint = system.hint() or message
                raise PropagatorError(f"the integrator gave up at t = {solver.t:g}: {hint}")
            dense = solver.dense_output()
            while reached < times.size and times[reached] <= solver.t:
                states[alive, reached] = dense(times[reached]).reshape(n, d)[alive]
                reached += 1
            if self.stop is None:
                continue
            now = self._sides(solver.t, solver.y.reshape(n, d), batch.parameters)
            crossed = np.flatnonzero(alive & (side * now <= 0) & (side != 0))
            for row in crossed:
                ended[row] = self._root(dense, solver.t_old, solver.t, int(row), batch)
                states[row, times > ended[row]] = np.nan
            side = np.where(side == 0, now, side)
            if crossed.size:
                # an ended run stands still; what the solver has learnt of it is forgotten
                alive[crossed] = False
                if solver.t < times[-1]:
                    step = min(abs(solver.step_size), times[-1] - solver.t)
                    solver = self._solver(system, solver.t, solver.y, times[-1], step)
        return Trajectories(states, ended)

    def _solver(
        self, system: _System, t: float, y: FloatArray, end: float, first: float | None
    ) -> Any:
        from scipy import integrate

        n, d = system.shape
        share = 1.0 / np.sqrt(n)
        options: dict[str, Any] = {"max_step": self.max_step, "first_step": first}
        if n > 1 and self.method == "LSODA":
            options |= {"lband": d - 1, "uband": d - 1}
        elif n > 1 and self.method in ("Radau", "BDF"):
            from scipy.sparse import block_diag

            options["jac_sparsity"] = block_diag([np.ones((d, d))] * n, format="csc")
        atol = np.broadcast_to(self.atol, (n, d)).ravel() * share
        kind = getattr(integrate, self.method)
        return kind(system, t, y, end, rtol=max(self.rtol * share, 3e-14), atol=atol, **options)

    def _sides(self, t: float, x: FloatArray, p: FloatArray) -> FloatArray:
        """Sign of `stop` for each run."""
        if self.stop is None:
            return np.ones(x.shape[0])
        return np.sign(stop_values(self.stop, t, x, p))

    def _root(self, dense: Any, before: float, after: float, row: int, batch: Batch) -> float:
        from scipy.optimize import brentq

        assert self.stop is not None
        stop, (n, d) = self.stop, batch.states.shape
        p = batch.parameters[row : row + 1]

        def value(t: float) -> float:
            x = dense(t).reshape(n, d)[row : row + 1]
            return float(stop_values(stop, t, x, p)[0])

        if value(before) * value(after) > 0:  # the dense output differs from the step by a trace
            return after
        return float(brentq(value, before, after, xtol=1e-12 * max(abs(after), after - before)))


class _System:
    """The right-hand side of all runs on one long vector."""

    def __init__(self, rates: Rates, batch: Batch, alive: BoolArray) -> None:
        self.rates, self.batch, self.alive = rates, batch, alive
        self.shape = batch.states.shape
        self.unfit: float | None = None

    def __call__(self, t: float, y: FloatArray) -> FloatArray:
        batch = self.batch
        value = self.rates(t, y.reshape(self.shape), batch.forcing(t), batch.parameters)
        slope = shaped_slope(value, self.shape)
        if not self.alive.all():
            slope = np.where(self.alive[:, None], slope, 0.0)
        if not np.isfinite(slope).all():
            self.unfit = t
        return slope.ravel()

    def hint(self) -> str:
        return "" if self.unfit is None else f"rhs is not finite near t = {self.unfit:g}"


def shaped_slope(value: Any, shape: tuple[int, ...]) -> FloatArray:
    """What rhs returned as an array (n, d)."""
    try:
        slope = np.asarray(value, dtype=float)
    except (TypeError, ValueError) as error:
        raise PropagatorError(f"rhs did not return numbers: {error}") from None
    if slope.shape != shape:
        raise PropagatorError(f"rhs returned shape {slope.shape}; it must be {shape}")
    return slope


def stop_values(stop: Stop, t: float, x: FloatArray, p: FloatArray) -> FloatArray:
    """What stop returned as an array (n,)."""
    value = np.asarray(stop(t, x, p), dtype=float)
    if value.shape != x.shape[:1]:
        raise PropagatorError(
            f"stop returned shape {value.shape}; it must be {x.shape[:1]}: a number a run"
        )
    if not np.isfinite(value).all():
        raise PropagatorError(f"stop is not finite at t = {t:g}")
    return value
