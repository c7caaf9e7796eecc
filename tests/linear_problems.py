"""Small vectorised propagators and studies that several tests share; all invented."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import nipc.workflow as workflow
from nipc.answers.result import Result
from nipc.problem.study import Study
from nipc.runs.propagator import Batch, Propagator, Trajectories


class Stepper(Propagator):
    """Classical Runge-Kutta of rates(t, x, xi, p) with steps of at most `step`."""

    vectorised = True

    def __init__(self, rates: Callable[..., Any], step: float) -> None:
        self.rates, self.step = rates, step

    def fingerprint(self) -> str:
        code = self.rates.__code__.co_code
        return hashlib.sha256(code).hexdigest() + f" {self.step}"

    def propagate(self, batch: Batch) -> Trajectories:
        x, p = batch.states.copy(), batch.parameters
        out = np.empty((len(batch), batch.times.size, x.shape[1]))
        out[:, 0] = x
        for i in range(batch.times.size - 1):
            a, b = batch.times[i], batch.times[i + 1]
            steps = max(1, int(np.ceil((b - a) / self.step - 1e-9)))
            t = np.linspace(a, b, 2 * steps + 1)
            xi, h = batch.forcing.table(t), (b - a) / steps
            for k in range(0, 2 * steps, 2):
                k1 = self.rates(t[k], x, xi[:, k], p)
                k2 = self.rates(t[k + 1], x + h / 2 * k1, xi[:, k + 1], p)
                k3 = self.rates(t[k + 1], x + h / 2 * k2, xi[:, k + 1], p)
                k4 = self.rates(t[k + 2], x + h * k3, xi[:, k + 2], p)
                x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
            out[:, i + 1] = x
        return Trajectories.complete(out)


def solved(study: Study, propagator: Propagator, folder: Path, patch: pytest.MonkeyPatch) -> Result:
    """The study run in this process with the propagator."""
    patch.setattr(workflow, "build_propagator", lambda _: propagator)
    return workflow.run(study, folder=folder, backend="inline")


def linear(matrix: Any, noise: Any) -> Callable[..., Any]:
    """rates of x' = A x + B xi."""
    a, b = np.array(matrix, float), np.array(noise, float)
    return lambda t, x, xi, p: x @ a.T + xi @ b.T
