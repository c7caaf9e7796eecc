"""Small studies whose answers are known, run in this process."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import xarray as xr

import nipc.workflow as workflow
from nipc.problem.study import Study
from nipc.runs.propagator import Batch, Propagator, Trajectories


class Stepper(Propagator):
    """Classical Runge-Kutta on a smooth forcing path, many runs at once.

    `stop` (n, d) -> (n,) tells which motions have ended at an output time.
    """

    vectorised = True

    def __init__(
        self,
        rates: Callable[..., np.ndarray],
        step: float,
        stop: Callable[[np.ndarray], np.ndarray] | None = None,
    ) -> None:
        self.rates, self.step, self.stop = rates, step, stop

    def fingerprint(self) -> str:
        return f"{self.rates.__name__} {self.step}"

    def propagate(self, batch: Batch) -> Trajectories:
        x = batch.states.copy()
        out = np.empty((len(batch), batch.times.size, x.shape[1]))
        out[:, 0] = x
        ended = np.full(len(batch), np.nan)
        for i, (a, b) in enumerate(zip(batch.times[:-1], batch.times[1:], strict=True)):
            steps = max(1, int(np.ceil((b - a) / self.step - 1e-9)))
            t = np.linspace(a, b, 2 * steps + 1)
            xi, h, p = batch.forcing.table(t), 2 * (t[1] - t[0]), batch.parameters
            for k in range(0, 2 * steps, 2):
                k1 = self.rates(t[k], x, xi[:, k], p)
                k2 = self.rates(t[k + 1], x + h / 2 * k1, xi[:, k + 1], p)
                k3 = self.rates(t[k + 1], x + h / 2 * k2, xi[:, k + 1], p)
                k4 = self.rates(t[k + 2], x + h * k3, xi[:, k + 2], p)
                x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
            out[:, i + 1] = x
            if self.stop is not None:
                now = self.stop(x) & np.isnan(ended)
                ended[now] = b
                out[ended < b, i + 1] = np.nan
        return Trajectories(out, ended)


def solved(study: Study, propagator: Propagator) -> xr.Dataset:
    """The study's result with this propagator, in this process."""
    usual = workflow.build_propagator
    workflow.build_propagator = lambda _: propagator
    try:
        with tempfile.TemporaryDirectory() as folder:
            return workflow.run(study, folder=Path(folder), backend="inline").dataset
    finally:
        workflow.build_propagator = usual


def linear(matrix: np.ndarray, gains: np.ndarray) -> Callable[..., np.ndarray]:
    """x' = A x + G xi."""

    def rates(t: float, x: np.ndarray, xi: np.ndarray, p: np.ndarray) -> np.ndarray:
        return x @ matrix.T + xi @ gains.T

    rates.__name__ = f"linear {matrix.tolist()} {gains.tolist()}"
    return rates
