"""Batches, contexts and the exact motion that tests of adapters share; all invented.

The motion is the driven oscillator x' = v, v' = -k x + xi(t). With a Legendre path of N terms the
forcing is a polynomial, so that the exact motion follows from one matrix exponential.
"""

import numpy as np
from scipy.linalg import expm

from nipc.adapters import load_adapter
from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import AdapterContext, Batch

END = 3.0


def oscillator_batch(n=4, times=7, terms=4, seed=0, sources=1, end=END, intensity=0.3):
    """n runs from t = 1 on, with stiffness k between 0.8 and 1.2."""
    rng = np.random.default_rng(seed)
    model = NoiseModel(
        tuple(Source(f"push{j + 1}", "", intensity) for j in range(sources)),
        tuple(Legendre(terms) for _ in range(sources)), 1.0, 1.0 + end,
    )  # fmt: skip
    return Batch(
        rng.normal(size=(n, 2)),
        np.linspace(1.0, 1.0 + end, times),
        model.realise(rng.normal(size=(n, model.size))),
        rng.uniform(0.8, 1.2, size=(n, 1)),
    )


def oscillator(batch):
    """Exact states (n, m, 2) under the first source: x' = A x, powers of time being states."""
    times, forcing = batch.times, batch.forcing
    out = np.empty((len(batch), times.size, 2))
    degree = forcing.model.bases[0].terms - 1
    span = times[-1] - times[0]
    nodes = np.linspace(0.0, 1.0, degree + 1)
    table = forcing.table(times[0] + span * nodes)[:, :, 0]
    for i in range(len(batch)):
        powers = np.linalg.solve(np.vander(nodes, increasing=True), table[i])
        size = 2 + powers.size
        matrix = np.zeros((size, size))
        matrix[0, 1] = 1.0
        matrix[1, 0] = -batch.parameters[i, 0]
        matrix[1, 2:] = powers
        for p in range(1, powers.size):  # d(u^p)/dt = p u^(p - 1) / span
            matrix[2 + p, 1 + p] = p / span
        start = np.zeros(size)
        start[:2], start[2] = batch.states[i], 1.0
        for m, t in enumerate(times):
            out[i, m] = (expm(matrix * (t - times[0])) @ start)[:2]
    return out


def context(folder, states=("x", "v"), parameters=("k",), sources=("push1",), ito=()):
    return AdapterContext(folder, folder / "runs", states, parameters, sources, ito)


def build(name, folder, where=None, **settings):
    """The adapter's propagator for these settings."""
    adapter = load_adapter(name)
    return adapter.build(adapter.Settings.model_validate(settings), where or context(folder))


def one_by_one(propagator, batch):
    """States and endings of all runs, each asked for by itself."""
    found = [propagator.propagate(batch.take(slice(i, i + 1))) for i in range(len(batch))]
    return np.concatenate([f.states for f in found]), np.concatenate([f.ended for f in found])
