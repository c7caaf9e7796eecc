"""Benchmarks of adapters: what a run costs beyond the program's own work, and what kicks lose.

The program's own work is timed without nipc on the same runs: of programs that of writing the
request and reading the answer as bare bytes, of a library that of its bare call. The adapter and
the bare work take turns in one process, and the best of several turns counts.
"""

from __future__ import annotations

import ctypes
import subprocess
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from measure import at_most, times

from nipc.adapters import load_adapter
from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import AdapterContext, Batch, Propagator

Row = dict[str, Any]
TESTS = Path(__file__).parents[1]
PROGRAMS = TESTS / "adapters" / "programs"
sys.path.insert(0, str(TESTS / "adapters"))

STEP = 0.025  # 121 rows of forcing over three units of time
ARGUMENTS = (
    "state", "n_times", "times", "parameters", "n_forcing", "forcing_times", "forcing", "states",
)  # fmt: skip


def batch_of(n: int) -> Batch:
    """n runs of the driven oscillator over 7 times, one source of four terms."""
    rng = np.random.default_rng(0)
    model = NoiseModel((Source("push1", "", 0.3),), (Legendre(4),), 1.0, 4.0)
    return Batch(
        rng.normal(size=(n, 2)), np.linspace(1.0, 4.0, 7),
        model.realise(rng.normal(size=(n, model.size))), np.full((n, 1), 1.1),
    )  # fmt: skip


def compiled(source: str, target: Path, *options: str) -> Path:
    compiler = "gfortran" if source.endswith(".f90") else "cc"
    command = [compiler, "-O2", "-o", str(target), str(PROGRAMS / source), *options, "-lm"]
    subprocess.run(command, check=True, cwd=target.parent)
    return target


def built(name: str, folder: Path, **settings: Any) -> Propagator:
    adapter = load_adapter(name)
    context = AdapterContext(folder, folder / "runs", ("x", "v"), ("k",), ("push1",))
    return adapter.build(adapter.Settings.model_validate(settings), context)


def beyond(ours: Callable[[], Any], own: Callable[[], Any], runs: int, repeats: int = 7) -> float:
    """Seconds a run of our work beyond the program's own."""
    mine, bare = times(ours, own, repeats=repeats)
    return (mine - bare) / runs


def persistent(folder: Path, n: int = 200) -> Row:
    """A C program that stays, beside the same bytes written to it and read from it."""
    program = compiled("loop.c", folder / "loop")
    propagator: Any = built("persistent", folder, command=[str(program)], forcing_step=STEP)
    batch = batch_of(n)
    singles = [batch.take(slice(i, i + 1)) for i in range(n)]
    requests = [propagator._request(one) for one in singles]
    with subprocess.Popen([str(program)], stdin=subprocess.PIPE, stdout=subprocess.PIPE) as bare:
        assert bare.stdin is not None
        assert bare.stdout is not None
        stdin, answers = bare.stdin, bare.stdout

        def own() -> None:
            for request in requests:
                stdin.write(request)
                stdin.flush()
                answers.readline()

        def ours() -> None:
            for one in singles:
                propagator.propagate(one)

        cost = beyond(ours, own, n)
        stdin.close()
    propagator.close()
    return at_most("persistent adapter, 121 rows of forcing: a run beyond the program's own work",
                   1e3 * cost, 0.5, "ms")  # fmt: skip


def one_start_for_many(folder: Path, n: int = 500) -> Row:
    """A Fortran program that reads a batch of cards, beside the program on files ready for it."""
    program = compiled("oscillator.f90", folder / "oscillator")
    deck = "&run n_times = $n_times, n_forcing = $n_forcing, n_runs = $n_runs, style = 'table' /\n"
    propagator: Any = built(
        "executable", folder, batch=True, command=[str(program)],
        inputs=[
            {"file": "run.nml", "text": deck + "$times\n"},
            {"file": "cards.txt", "text": "$x$v$k\n", "repeat": True},
        ],
        formats={"x": "%24.16e", "v": "%24.16e", "k": "%12.9f"},
        forcing={"file": "forcing.dat", "step": STEP},
        output={"file": "track.out", "columns": [3, 4], "time_column": 2, "run_column": 1,
                "time_tolerance": 1e-6},
    )  # fmt: skip
    batch = batch_of(n)
    ready = folder / "ready"
    ready.mkdir()
    propagator._write(batch, ready)

    def own() -> None:
        subprocess.run([str(program)], cwd=ready, check=True)

    cost = beyond(lambda: propagator.propagate(batch), own, n)
    return at_most("executable adapter, 500 cards a start: a run beyond the program's own work",
                   1e3 * cost, 0.5, "ms")  # fmt: skip


def library(folder: Path, n: int = 500) -> list[Row]:
    """A C function, run by run and as a batch, beside its bare calls on the same arrays."""
    path = compiled("motion.c", folder / "motion.so", "-shared", "-fPIC")
    given: dict[str, Any] = {"library": str(path), "forcing_step": STEP}
    single = built("library", folder, function="propagate", arguments=ARGUMENTS, **given)
    many = built(
        "library", folder, function="propagate_many", arguments=("n_runs", *ARGUMENTS),
        batch=True, **given,
    )  # fmt: skip
    batch = batch_of(n)
    singles = [batch.take(slice(i, i + 1)) for i in range(n)]
    bare = ctypes.CDLL(str(path)).propagate_many
    grid = np.linspace(1.0, 4.0, 121)
    table = np.ascontiguousarray(batch.forcing.table(grid)[:, :, 0])
    found = np.empty((n, 7, 2))
    arrays = [a.ctypes.data for a in (batch.states, batch.times, batch.parameters, grid, table,
                                      found)]  # fmt: skip
    p = [ctypes.c_void_p(a) for a in arrays]
    c = ctypes.c_int32

    def own() -> None:
        bare(c(n), p[0], c(7), p[1], p[2], c(121), p[3], p[4], p[5])

    def ours() -> None:
        for one in singles:
            single.propagate(one)

    rows = []
    for name, work in (("one by one", ours), ("a batch", lambda: many.propagate(batch))):
        cost = 1e6 * beyond(work, own, n)
        rows.append(
            at_most(f"library adapter, {name}: a run beyond the function's own work", cost, 20.0,
                    "us")
        )  # fmt: skip
    assert np.allclose(many.propagate(batch).states, found, atol=1e-12)
    return rows


def kicks() -> list[Row]:
    """Covariance of kicked motion beside that of forced motion, 8 legs a quarter period."""
    from kicked_motions import clohessy_wiltshire_error, geostationary_error

    return [
        at_most(f"kicks, {name}: covariance beside the forced one's", 100.0 * error, 1.0, "%")
        for name, error in (
            ("Clohessy-Wiltshire, 8 legs a quarter period", clohessy_wiltshire_error(8)),
            ("geostationary example, 8 legs a quarter period", geostationary_error(8)),
        )
    ]


def rows() -> list[Row]:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        return [persistent(folder), one_start_for_many(folder), *library(folder), *kicks()]
