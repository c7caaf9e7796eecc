"""A sound propagator, and the mistakes that propagators are made with; all invented."""

import os
import time

import numpy as np

from nipc.errors import PropagatorError
from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import Batch, Propagator, Trajectories


class Faulty(Propagator):
    """x' = v, v' = -x + push, x' += wind / 10, by classical Runge-Kutta, with a fault."""

    def __init__(self, fault, vectorised=False):
        self.fault, self.vectorised = fault, vectorised

    def propagate(self, batch):
        if self.fault == "fails":
            raise PropagatorError("the beam is off")
        if self.fault == "crashes":
            os._exit(13)
        states, times = batch.states.copy(), batch.times
        if self.fault == "wrong start":
            states[:, 1] *= 1.1
        if self.fault == "state not restored":
            states[:, 1] = np.round(states[:, 1], 2)
        if self.fault == "mixing":
            states = states + 0.1 * states.mean(axis=0)
        if self.fault == "own noise":
            states = states + 1e-3 * (time.perf_counter_ns() % 1000 + 1)
        shift = times[0] if self.fault == "time not restored" else 0.0
        out = np.empty((len(batch), times.size, 2))
        out[:, 0] = x = states
        for i in range(times.size - 1):
            h = (times[i + 1] - times[i]) / 5
            for k in range(5):
                t = times[i] + h * k
                x = self._step(t, h, x, batch.forcing, shift)
            out[:, i + 1] = x
        if self.fault == "five digits":
            out[:, 1:] = [[[float(f"{v:.4e}") for v in s] for s in run] for run in out[:, 1:]]
        if self.fault in ("state not restored", "mixing", "own noise"):
            out[:, 0] = batch.states
        return Trajectories.complete(out)

    def _step(self, t, h, x, forcing, shift):
        a = self._rates(t, x, forcing, shift)
        b = self._rates(t + h / 2, x + h / 2 * a, forcing, shift)
        c = self._rates(t + h / 2, x + h / 2 * b, forcing, shift)
        d = self._rates(t + h, x + h * c, forcing, shift)
        return x + h / 6 * (a + 2 * b + 2 * c + d)

    def _rates(self, t, x, forcing, shift):
        xi = forcing(t).copy()
        if self.fault == "noise squared":
            xi[:, 0] = xi[:, 0] ** 2
        if self.fault == "noise unheard":
            xi[:, 1] = 0.0
        if self.fault == "thousandfold":
            xi[:, 0] *= 1000.0
        if self.fault == "wrong sign":
            xi[:, 0] *= -1.0
        # a force that depends on the time, as of a tide
        force = 0.3 * np.cos(t - shift)
        return np.stack([x[:, 1] + 0.1 * xi[:, 1], -x[:, 0] + xi[:, 0] + force], axis=1)

    def fingerprint(self):
        return f"faulty {self.fault}"


def probe_batch(n=4):
    rng = np.random.default_rng(3)
    model = NoiseModel(
        (Source("push", "", 0.3), Source("wind", "", 0.5)), (Legendre(4), Legendre(4)), 0.0, 2.0
    )
    return Batch(
        rng.normal(size=(n, 2)), np.linspace(0.0, 2.0, 9),
        model.realise(rng.normal(size=(n, model.size))), np.empty((n, 0)),
    )  # fmt: skip
