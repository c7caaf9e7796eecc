"""What the expansions rest on: coefficients by degree, noise bases, where runs failed."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence

import numpy as np

from nipc.answers.table import ResultTable
from nipc.arrays import FloatArray, IntArray
from nipc.expansion.shares import shares_of_terms
from nipc.problem.noise import NoiseModel
from nipc.runs.whereabouts import FailedBatch

SHOWN_GOOD = 400
"""Good runs kept beside the failed ones."""


def degree_norms(coefficients: FloatArray, degrees: IntArray) -> FloatArray:
    """sqrt(mean over outputs of sum_{|t| = d} c_t^2 / sum_{t > 0} c_t^2) for d = 1, 2, ...

    coefficients (terms, outputs) of orthonormal terms of total degrees (terms,); outputs without
    variance are left out. NaN for a degree that has no term.
    """
    highest = int(degrees.max(initial=0))
    selections = degrees == np.arange(1, highest + 1)[:, None]
    shares = shares_of_terms(coefficients, selections)
    live = np.isfinite(shares).all(axis=0)
    if not live.any():
        return np.full(highest, np.nan)
    norms = np.sqrt(shares[:, live].mean(axis=1))
    return np.asarray(np.where(selections.any(axis=1), norms, np.nan))


def add_degree_norms(table: ResultTable, arcs: Sequence[FloatArray]) -> None:
    """The norms of each arc's coefficients, as `degree_norms` gives them."""
    width = max((len(norms) for norms in arcs), default=0)
    if not width:
        return
    values = np.full((len(arcs), width), np.nan)
    for row, norms in zip(values, arcs, strict=True):
        row[: len(norms)] = norms
    table.add(
        "degree_norm", ("arc", "degree"), values, "1", "norm of the coefficients of a total degree"
    )
    table.variables["degree"] = (("degree",), np.arange(1, width + 1), {"units": "1"})


def add_noise_bases(table: ResultTable, models: Iterable[NoiseModel]) -> None:
    """For each source the basis and the number of terms that most arcs have, as an attribute."""
    found: dict[str, Counter[tuple[str, int]]] = {}
    for model in models:
        for source, basis in zip(model.sources, model.bases, strict=True):
            found.setdefault(source.name, Counter())[basis.name, basis.terms] += 1
    table.attributes["noise_bases"] = [
        {"source": name, "basis": basis, "terms": terms, "arcs": arcs}
        for name, counts in found.items()
        for (basis, terms), arcs in counts.most_common(1)
    ]


def add_failures(table: ResultTable, batches: Sequence[FailedBatch]) -> None:
    """Where runs failed: when, and at what values, beside good runs of the same batches.

    Values are counted from the mean of a batch's runs in their standard deviations there, so that
    runs of different arcs can be looked at together; NaN where a batch has no such direction.
    """
    told = [batch for batch in batches if len(batch.ok) >= 10 and not batch.ok.all()]
    if not told:
        return
    names = list(dict.fromkeys(name for batch in told for name in batch.names))
    failed, good, times = [], [], []
    for batch in {(b.start, b.values.tobytes()): b for b in told}.values():
        rows = np.full((len(batch.ok), len(names)), np.nan)
        rows[:, [names.index(name) for name in batch.names]] = batch.values
        failed.append(rows[~batch.ok])
        times.append(np.full(int((~batch.ok).sum()), batch.start))
        good.append(rows[batch.ok])
    beside = np.concatenate(good)
    if len(beside) > SHOWN_GOOD:
        beside = beside[np.linspace(0, len(beside) - 1, SHOWN_GOOD).round().astype(int)]
    unit = table.study.clock.unit
    table.add(
        "failed_time", ("failed_run",), np.concatenate(times), unit,
        "start of the stretch in which the run failed",
    )  # fmt: skip
    for name, values, words in (
        ("failed", np.concatenate(failed), "runs that failed"),
        ("good", beside, "good runs of the same batches"),
    ):
        table.add(
            f"{name}_position", (f"{name}_run", "direction"), values.astype(np.float32), "1",
            f"{words}, from their batch's mean in its standard deviations",
        )  # fmt: skip
    study = table.study
    called = {f"start[{k}]": name for k, name in enumerate(study.state_names, 1)}
    called |= {f"parameter[{k}]": name for k, name in enumerate(study.parameter_names, 1)}
    table.variables["direction"] = (
        ("direction",),
        [called.get(n, n) for n in names],
        {"units": ""},
    )
