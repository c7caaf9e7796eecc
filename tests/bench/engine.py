"""Benchmarks of runs: what keeping, watching and sharing out cost beside doing without.

Goals are those that the project set itself. Ratios are taken in one process, the two sides in turn,
so that other work on the machine burdens both.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import joblib
import numpy as np

from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Row = dict[str, Any]
HERE = Path(__file__).parent


class Trivial(Propagator):
    """x(t) = start, at once or after a pause."""

    def __init__(self, pause: float = 0.0, vectorised: bool = False) -> None:
        self.pause, self.vectorised = pause, vectorised

    def propagate(self, batch: Batch) -> Trajectories:
        if self.pause:
            time.sleep(self.pause)
        return Trajectories.complete(np.repeat(batch.states[:, None, :], batch.times.size, axis=1))

    def fingerprint(self) -> str:
        return "trivial"


def trivial_batch(n: int, times: int = 11, states: int = 6, seed: int = 0) -> Batch:
    """n runs with one white source of eight terms."""
    rng = np.random.default_rng(seed)
    model = NoiseModel((Source("push", "", 1.0),), (Legendre(8),), 0.0, 1.0)
    return Batch(
        rng.normal(size=(n, states)),
        np.linspace(0.0, 1.0, times),
        model.realise(rng.normal(size=(n, model.size))),
        np.empty((n, 0)),
    )


def row(name: str, value: float, unit: str, goal: str, met: bool) -> Row:
    return {"name": name, "value": float(value), "unit": unit, "goal": goal, "met": bool(met)}


def _one(propagator: Propagator, batch: Batch) -> np.ndarray:
    return propagator.propagate(batch).states


def throughput(n: int = 1000, slices: int = 5) -> Row:
    """Runs of 20 ms on two workers, beside joblib with the same function and nothing kept."""
    propagator = Trivial(pause=0.02)
    batch = trivial_batch(n)
    ours = bare = 0.0
    with (
        tempfile.TemporaryDirectory() as folder,
        Ledger.open(Path(folder)) as ledger,
        Engine(propagator, ledger, n_jobs=2) as engine,
        joblib.Parallel(n_jobs=2) as pool,
    ):
        for start in (trivial_batch(8, seed=1),):  # both have their workers before the clock runs
            engine.run(start, "start")
            pool(joblib.delayed(_one)(propagator, start.take(slice(k, k + 1))) for k in range(8))
        size = n // slices
        for first in range(0, n, size):
            part = batch.take(slice(first, first + size))
            began = time.perf_counter()
            engine.run(part, "slice")
            ours += time.perf_counter() - began
            began = time.perf_counter()
            pool(joblib.delayed(_one)(propagator, part.take(slice(k, k + 1))) for k in range(size))
            bare += time.perf_counter() - began
    share = bare / ours
    return row(f"{n} runs of 20 ms, 2 workers: throughput of bare joblib", 100 * share, "%",
               ">= 95", share >= 0.95)  # fmt: skip


def overhead(n: int = 20_000, tries: int = 3) -> Row:
    """A trivial batch propagator, beside a loop over the same blocks that stores arrays.

    The least of a few tries: what is asked is the cost, not the load of the machine.
    """
    propagator = Trivial(vectorised=True)
    batch = trivial_batch(n)
    each = []
    for _ in range(tries):
        with (
            tempfile.TemporaryDirectory() as folder,
            Ledger.open(Path(folder)) as ledger,
            Engine(propagator, ledger, n_jobs=1) as engine,
        ):
            engine.run(trivial_batch(8, seed=1), "start")
            began = time.perf_counter()
            outcomes = engine.run(batch, "all")
            ours = time.perf_counter() - began
        began = time.perf_counter()
        states = np.empty_like(outcomes.states)
        for first in range(0, n, 64):
            rows = slice(first, first + 64)
            states[rows] = propagator.propagate(batch.take(rows)).states
        plain = time.perf_counter() - began
        assert np.array_equal(states, outcomes.states)
        each.append((ours - plain) / n)
    best = min(each)
    return row(
        f"{n} runs of a trivial batch propagator: overhead a run, ledger included",
        1e6 * best,
        "us",
        "<= 100",
        best <= 1e-4,
    )


def large(n: int = 100_000, times: int = 1000) -> list[Row]:
    """Runs of 1,000 times and 6 components kept and fitted, in a process of their own."""
    found = {}
    for size in (n // 4, n):
        with tempfile.TemporaryDirectory() as folder:
            command = [sys.executable, str(HERE / "engine_large.py"), folder, str(size), str(times)]
            done = subprocess.run(command, capture_output=True, text=True, check=True)
            found[size] = json.loads(done.stdout)
    peak = found[n]["peak_bytes"] / 2**30
    growth = np.log2(found[n]["seconds"] / found[n // 4]["seconds"]) / 2.0
    what = f"{n} runs x {times} times x 6 kept and fitted"
    return [
        row(f"{what}: peak memory", peak, "GiB", "<= 4", peak <= 4.0),
        row(f"{what}: time as a power of the number of runs", growth, "", "<= 1.15",
            growth <= 1.15),
        row(f"{what}: time", found[n]["seconds"], "s", "", True),
    ]  # fmt: skip


PROGRAM = """#include <stdio.h>
int main(void) {
    double t0, t1, x, v;
    FILE *in = fopen("input.txt", "r"), *out = fopen("output.txt", "w");
    if (!in || !out || fscanf(in, "%lf %lf %lf %lf", &t0, &t1, &x, &v) != 4) return 1;
    for (int k = 0; k <= 10; k++)
        fprintf(out, "%.17g %.17g\\n", x + v * (t1 - t0) * k / 10.0, v);
    return fclose(out);
}
"""


def executable(n: int = 1200, slices: int = 2) -> Row:
    """A trivial C program through its adapter, beside subprocess.run in a joblib loop."""
    from nipc.adapters.executable import ExecutableAdapter, ExecutableSettings

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "trivial.c").write_text(PROGRAM)
        subprocess.run(["cc", "-O2", "trivial.c", "-o", "trivial"], cwd=folder, check=True)
        (folder / "input.txt").write_text("0 1 1 1\n")
        settings = ExecutableSettings.model_validate({
            "command": ["./trivial"],
            "inputs": [{"file": "input.txt", "text": "$start $end $x $v\n"}],
            "output": {"file": "output.txt", "columns": [1, 2]},
        })  # fmt: skip
        context = AdapterContext(folder, folder / "scratch", ("x", "v"), (), ())
        propagator = ExecutableAdapter.build(settings, context)
        noiseless = NoiseModel((), (), 0.0, 1.0)
        starts = np.random.default_rng(0).normal(size=(n, 2))
        batch = Batch(
            starts, np.linspace(0.0, 1.0, 11), noiseless.realise(np.empty((n, 0))), np.empty((n, 0))
        )
        command = [str(folder / "trivial")]
        ours = bare = 0.0
        with (
            Ledger.open(folder / "work") as ledger,
            Engine(propagator, ledger, n_jobs=2) as engine,
            joblib.Parallel(n_jobs=2) as pool,
        ):
            size = n // slices
            engine.run(batch.take(slice(0, 4)), "start")
            pool(joblib.delayed(subprocess.run)(command, cwd=folder) for _ in range(4))
            for first in range(4, n - 4, size):
                part = batch.take(slice(first, first + size))
                began = time.perf_counter()
                assert engine.run(part, "slice").ok.all()
                ours += time.perf_counter() - began
                began = time.perf_counter()
                pool(joblib.delayed(subprocess.run)(command, cwd=folder) for _ in range(len(part)))
                bare += time.perf_counter() - began
    ratio = ours / bare
    return row("executable adapter, trivial C program: time of subprocess.run in a joblib loop",
               ratio, "x", "<= 1.3", ratio <= 1.3)  # fmt: skip


def rows() -> list[Row]:
    return [throughput(), overhead(), executable(), *large()]
