"""Past runs, from a table, as a study's runs: fitted without any new run.

The table has one line for each time of each run: a column that tells runs apart, the inputs
(repeated on each line), the time, the state. What an archive's design allows is judged from its
inputs in the germ, since nobody chose them for a fit.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from math import comb
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.runs.keys import run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import Batch, Propagator, Trajectories
from nipc.runs.record import Record, Status
from nipc.runs.tables import TableError, read_table

_RUNS_PER_TERM = 1.4  # what least squares needs at the least; see the design of arcs


@dataclass(frozen=True, eq=False)
class Archive:
    """n past runs: inputs (n, k) in physical units, times (m,), states (n, m, d).

    `digest` identifies the file they came from.
    """

    inputs: FloatArray
    times: FloatArray
    states: FloatArray
    digest: str


@dataclass(frozen=True)
class Columns:
    """Which columns of the table are what."""

    run: str
    time: str
    inputs: tuple[str, ...]
    states: tuple[str, ...]


def read_archive(path: Path, columns: Columns) -> Archive:
    """The archive in a table. InputError when runs have other times, or inputs that vary."""
    try:
        heads, table = read_table(path)
    except TableError as error:
        raise InputError(f"{path}: {error}") from None
    wanted = (columns.run, columns.time, *columns.inputs, *columns.states)
    lacking = [name for name in wanted if name not in heads]
    if lacking:
        raise InputError(
            f"{path}: no column {', '.join(map(repr, lacking))}; there are {', '.join(heads)}"
        )

    def pick(*names: str) -> FloatArray:
        return table[:, [heads.index(name) for name in names]]

    if not np.isfinite(pick(*wanted)).all():
        raise InputError(f"{path}: some values are not finite")
    _, run = np.unique(pick(columns.run)[:, 0], return_inverse=True)
    order = np.lexsort((pick(columns.time)[:, 0], run))
    counts = np.bincount(run)
    if counts.min() != counts.max():
        raise InputError(
            f"{path}: runs have between {counts.min()} and {counts.max()} times; all must have the"
            " same"
        )
    shape = (counts.size, int(counts[0]))
    times = pick(columns.time)[order, 0].reshape(shape)
    if np.any(times != times[0]) or np.any(np.diff(times[0]) <= 0.0):
        raise InputError(f"{path}: runs must all have the same times, each once")
    inputs = pick(*columns.inputs)[order].reshape(*shape, -1)
    if np.any(inputs != inputs[:, :1]):
        raise InputError(f"{path}: inputs change within a run")
    states = pick(*columns.states)[order].reshape(*shape, -1)
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    return Archive(inputs[:, 0], times[0], states, digest)


class ArchivePropagator(Propagator):
    """Stands for the program that made an archive; it cannot run anything."""

    def __init__(self, archive: Archive) -> None:
        self._digest = archive.digest

    def propagate(self, batch: Batch) -> Trajectories:
        raise PropagatorError("the archive holds no such run, and its program is not at hand")

    def fingerprint(self) -> str:
        return f"archive {self._digest}"


def ingest(ledger: Ledger, archive: Archive, batch: Batch) -> int:
    """Keep an archive's runs as those of a batch with the same rows and times; how many are new."""
    if len(batch) != archive.states.shape[0] or not np.array_equal(batch.times, archive.times):
        raise InputError("the batch is not that of the archive: other runs or other times")
    propagator = ArchivePropagator(archive)
    keys = run_keys(batch, propagator.fingerprint())
    known = ledger.find(keys)
    number = ledger.begin(batch, propagator.fingerprint(), "archive", len(batch), len(known))
    records = [
        Record(
            key=key, status=Status.DONE, start=batch.states[row],
            coefficients=batch.forcing.coefficients[row], parameters=batch.parameters[row],
            states=archive.states[row], ended=np.nan, host="archive",
        )
        for row, key in enumerate(keys)
        if key not in known
    ]  # fmt: skip
    ledger.write(records, number)
    return len(records)


@dataclass(frozen=True)
class ArchiveJudgement:
    """What a fit may be asked to do with an archive's design.

    `degree` is the largest total degree with 1.4 runs a term; `fixed` are inputs that never
    change; `tied` pairs of inputs correlated beyond 0.5; `narrow` inputs whose spread is less than
    half of what the study assumes, `beyond` those whose centre is more than one standard deviation
    off; `reach` is the share of the study's own samples that lie within the archive's ranges.
    """

    runs: int
    degree: int
    fixed: tuple[str, ...]
    tied: tuple[tuple[str, str, float], ...]
    narrow: tuple[str, ...]
    beyond: tuple[str, ...]
    reach: float

    def sentences(self) -> list[str]:
        """The same, for the page."""
        said = [
            f"The archive's {self.runs} runs allow a fit up to total degree {self.degree}"
            if self.degree
            else f"The archive's {self.runs} runs are too few for a fit of degree 1"
        ]
        if self.fixed:
            said.append(f"It says nothing about {', '.join(self.fixed)}: never varied in it")
        said += [
            f"The effects of {one} and {other} cannot well be told apart (correlation {r:+.2f})"
            for one, other, r in self.tied
        ]
        if self.narrow:
            said.append(f"Extrapolated: {', '.join(self.narrow)} vary less than the study assumes")
        if self.beyond:
            said.append(f"Extrapolated: {', '.join(self.beyond)} are centred elsewhere")
        said.append(f"{self.reach:.0%} of the study's samples lie within the archive's ranges")
        return said


def judge(germ: FloatArray, names: tuple[str, ...], samples: FloatArray) -> ArchiveJudgement:
    """Judge an archive's inputs in the germ (n, k), beside samples (N, k) of the study's own."""
    runs = germ.shape[0]
    spread = germ.std(axis=0)
    varied = spread > 1e-9 * np.maximum(1.0, np.abs(germ).max(axis=0))
    used = np.flatnonzero(varied)
    degree = 0
    while used.size and _RUNS_PER_TERM * comb(used.size + degree + 1, degree + 1) <= runs:
        degree += 1
    tied = []
    if used.size > 1:
        correlation = np.atleast_2d(np.corrcoef(germ[:, used], rowvar=False))
        for i, j in zip(*np.triu_indices(used.size, 1), strict=True):
            if abs(correlation[i, j]) > 0.5:
                tied.append((names[used[i]], names[used[j]], float(correlation[i, j])))
    expected = samples.std(axis=0)
    narrow = varied & (spread < 0.5 * expected)
    beyond = varied & (np.abs(germ.mean(axis=0) - samples.mean(axis=0)) > expected)
    inside = (samples >= germ.min(axis=0)) & (samples <= germ.max(axis=0))

    def named(which: FloatArray) -> tuple[str, ...]:
        return tuple(name for name, flag in zip(names, which, strict=True) if flag)

    return ArchiveJudgement(
        runs, degree, named(~varied), tuple(tied), named(narrow), named(beyond),
        float(inside[:, used].all(axis=1).mean()) if used.size else 0.0,
    )  # fmt: skip
