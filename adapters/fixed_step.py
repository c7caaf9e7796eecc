"""Explicit Runge-Kutta with fixed steps for many runs at once, none of which sees the others."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from nipc.adapters.adaptive import Rates, Stop, stop_values
from nipc.arrays import BoolArray, FloatArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import Batch, Trajectories

CHUNK = 2_000_000  # forcing values made at once


def tableau(method: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """(a, b, c): the classical fourth-order method, or Dormand and Prince's of order eight.

    Hairer, Norsett & Wanner (1993), Solving Ordinary Differential Equations I, sections II.1 and
    II.5; the coefficients of the latter are taken from scipy's DOP853.
    """
    if method == "rk4":
        a = np.zeros((4, 4))
        a[1, 0] = a[2, 1] = 0.5
        a[3, 2] = 1.0
        return a, np.array([1.0, 2.0, 2.0, 1.0]) / 6.0, np.array([0.0, 0.5, 0.5, 1.0])
    from scipy.integrate import DOP853

    return np.array(DOP853.A), np.array(DOP853.B), np.array(DOP853.C)


def integrate(
    rates: Rates, batch: Batch, method: str, step: float, stop: Stop | None = None
) -> Trajectories:
    """Trajectories of the batch; each gap between its times is cut into equal steps.

    A run ends at the zero of `stop`, found on the cubic Hermite polynomial of the step.
    """
    a, b, c = tableau(method)
    times, x = batch.times, batch.states.copy()
    n, d = x.shape
    out = np.full((n, times.size, d), np.nan)
    out[:, 0] = x
    stages = np.empty((b.size, n, d))
    room = max(1, CHUNK // (n * b.size * max(1, batch.forcing.n_sources)))
    endings = None if stop is None else _Endings(rates, stop, batch)
    for i in range(times.size - 1):
        steps = max(1, math.ceil((times[i + 1] - times[i]) / step - 1e-9))
        h = (times[i + 1] - times[i]) / steps
        for first in range(0, steps, room):
            count = min(room, steps - first)
            grid = times[i] + h * (first + np.arange(count))[:, None] + h * c
            xi = batch.forcing.table(grid.ravel())
            for k in range(count):
                for s in range(b.size):
                    y = x + h * np.tensordot(a[s, :s], stages[:s], 1) if s else x
                    value = rates(grid[k, s], y, xi[:, k * b.size + s], batch.parameters)
                    _store(value, stages[s])
                before, x = x, x + h * np.tensordot(b, stages, 1)
                if endings is not None:
                    x = endings.after(grid[k, 0], h, before, x, stages[0])
        out[:, i + 1] = x
    ended = np.full(n, np.nan) if endings is None else endings.ended
    out[times > ended[:, None]] = np.nan
    return Trajectories(out, ended)


def _store(value: Any, place: FloatArray) -> None:
    if np.shape(value) != place.shape:
        raise PropagatorError(f"rhs returned shape {np.shape(value)}; it must be {place.shape}")
    try:
        place[...] = value
    except (ValueError, TypeError) as error:
        raise PropagatorError(f"rhs did not return numbers: {error}") from None


class _Endings:
    """Which runs have ended, and when."""

    def __init__(self, rates: Rates, stop: Stop, batch: Batch) -> None:
        self.rates, self.stop, self.batch = rates, stop, batch
        self.ended = np.full(len(batch), np.nan)
        self.side = self._sides(batch.times[0], batch.states)

    def _sides(self, t: float, x: FloatArray) -> FloatArray:
        return np.sign(stop_values(self.stop, t, x, self.batch.parameters))

    def after(
        self, t: float, h: float, before: FloatArray, x: FloatArray, slope: FloatArray
    ) -> FloatArray:
        """States after a step from t: those of ended runs stay where they were."""
        alive = np.isnan(self.ended)
        x = np.where(alive[:, None], x, before)
        now = self._sides(t + h, x)
        crossed = alive & (self.side * now <= 0) & (self.side != 0)
        if crossed.any():
            self._find(t, h, before, x, slope, crossed)
        self.side = np.where(self.side == 0, now, self.side)
        return x

    def _find(
        self,
        t: float,
        h: float,
        before: FloatArray,
        x: FloatArray,
        slope: FloatArray,
        crossed: BoolArray,
    ) -> None:
        from scipy.interpolate import CubicHermiteSpline
        from scipy.optimize import brentq

        last = np.asarray(
            self.rates(t + h, x, self.batch.forcing(t + h), self.batch.parameters), float
        )
        for row in np.flatnonzero(crossed):
            path = CubicHermiteSpline(
                [t, t + h], [before[row], x[row]], [slope[row], last[row]], axis=0
            )
            p = self.batch.parameters[row : row + 1]

            def value(s: float, path: Any = path, p: FloatArray = p) -> float:
                return float(stop_values(self.stop, s, path(s)[None], p)[0])

            self.ended[row] = t + h if value(t) * value(t + h) > 0 else brentq(value, t, t + h)
