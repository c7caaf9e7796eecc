"""One study asked at ten intensities against ten studies; all answers of a large ensemble."""

from __future__ import annotations

import resource
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from economy_problems import Problem, geostationary

import nipc.questions as questions
import nipc.workflow as workflow
from nipc.answers.panel_data import add_panel
from nipc.answers.scaled import ScaledChain
from nipc.answers.sweep import sweep
from nipc.problem.study import Study
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger

SCALES = tuple(float(s) for s in np.geomspace(0.25, 2.0, 10))
SWEPT = 8192


@contextmanager
def propagated_by(problem: Problem) -> Iterator[None]:
    """For the time of the block, studies are run by the problem's own propagator."""
    usual = workflow.build_propagator
    for module in (workflow, questions):
        module.build_propagator = lambda study: problem.propagator
    try:
        yield
    finally:
        for module in (workflow, questions):
            module.build_propagator = usual


def with_members(study: Study, members: int, factor: float = 1.0) -> Study:
    """The study with so many members and its noise so many times as strong."""
    noise = [n.model_copy(update={"intensity": factor * n.intensity}) for n in study.noise]
    ensemble = study.ensemble.model_copy(update={"members": members})
    return study.model_copy(update={"noise": noise, "ensemble": ensemble})


@dataclass(frozen=True)
class Swept:
    """Runs of ten studies over those of one, and the largest gap of their standard deviations."""

    ratio: float
    gap: float
    scales: tuple[float, ...]
    gaps: tuple[float, ...]


def swept(members: int = SWEPT, scales: tuple[float, ...] = SCALES) -> Swept:
    """The planar geostationary study over 28 days, two sources, at each of the scales."""
    problem = geostationary(2)
    study = with_members(problem.study, members)
    runs, gaps = [], []
    with propagated_by(problem), tempfile.TemporaryDirectory() as folder:
        one = workflow.run(study, folder=Path(folder) / "one", backend="inline").dataset
        with questions.reopened(study, folder=Path(folder) / "one", backend="inline") as again:
            data = sweep(again.scaled, scales)
        for k, scale in enumerate(scales):
            fresh = workflow.run(
                with_members(problem.study, members, scale),
                folder=Path(folder) / f"fresh {k}",
                backend="inline",
            ).dataset
            runs.append(fresh.attrs["propagator_runs"])
            ratio = data["std"].values[k][:, 1:] / fresh["std"].values[:, 1:]
            gaps.append(float(np.max(np.abs(ratio - 1.0))))
    return Swept(sum(runs) / one.attrs["propagator_runs"], max(gaps), scales, tuple(gaps))


@dataclass(frozen=True)
class Answered:
    """Seconds of all answers of a chain at numbers of members, and the process's peak memory."""

    members: tuple[int, ...]
    seconds: tuple[float, ...]
    gigabytes: float

    @property
    def growth(self) -> float:
        """Exponent e of seconds ~ members^e."""
        return float(np.polyfit(np.log(self.members), np.log(self.seconds), 1)[0])


def answered(members: tuple[int, ...] = (25_000, 50_000, 100_000)) -> Answered:
    """40 arcs, 3 quantities, 2 sources and the start; the chain itself is solved beforehand."""
    problem = geostationary(2, days=20.0, arcs=40)
    seconds = []
    for count in members:
        study = with_members(problem.study, count)
        with (
            tempfile.TemporaryDirectory() as folder,
            Ledger.open(Path(folder)) as ledger,
            Engine(problem.propagator, ledger, backend="inline") as engine,
        ):
            answers, _ = workflow.solved_chain(study, engine, workflow.build_quantities(study))
            began = time.perf_counter()
            add_panel(answers.table(), ScaledChain(answers))
            seconds.append(time.perf_counter() - began)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    return Answered(members, tuple(seconds), peak)
