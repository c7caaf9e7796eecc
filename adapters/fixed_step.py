"""Explicit Runge-Kutta with fixed steps for many runs at once, none of which sees the others."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import PropagatorError
from nipc.runs.propagator import Batch

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


def integrate(rhs: Callable[..., Any], batch: Batch, method: str, step: float) -> FloatArray:
    """States (n, m, d) at the batch's times; each gap is cut into equal steps of at most `step`."""
    a, b, c = tableau(method)
    times, x = batch.times, batch.states.copy()
    n, d = x.shape
    out = np.empty((n, times.size, d))
    out[:, 0] = x
    stages = np.empty((b.size, n, d))
    room = max(1, CHUNK // (n * b.size * max(1, batch.forcing.n_sources)))
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
                    value = rhs(grid[k, s], y, xi[:, k * b.size + s], batch.parameters)
                    try:
                        stages[s] = value
                    except (ValueError, TypeError):
                        raise PropagatorError(
                            f"rhs returned shape {np.shape(value)}; it must be {(n, d)}"
                        ) from None
                x = x + h * np.tensordot(b, stages, 1)
        out[:, i + 1] = x
    return out
