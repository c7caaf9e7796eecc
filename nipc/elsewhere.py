"""Runs made on machines that nipc cannot reach: out as cards, back as results, arc after arc.

A chain's arcs follow each other, and so do a design and its check: what is missing is always the
next batch. Export it, run it where you can, import it, and export again until nothing is missing.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from nipc.errors import InputError
from nipc.workflow import build_propagator, build_quantities, solved_chain, work_folder

if TYPE_CHECKING:
    from nipc.problem.study import Study
    from nipc.runs.exchange import ImportReport
    from nipc.runs.kept import MissingRuns
    from nipc.runs.ledger import Ledger


@dataclass(frozen=True)
class Exported:
    """How many runs were written, and what they are of; none when nothing is missing."""

    runs: int
    label: str


def export_missing(study: Study, folder: str | Path) -> Exported:
    """Write the next batch of missing runs into a new folder: a table, and a card for each run."""
    from nipc.runs.exchange import Names, export_runs

    with _waiting(study) as (ledger, missing, fingerprint):
        if missing is None:
            return Exported(0, "")
        names = Names(study.state_names, study.parameter_names)
        count = export_runs(ledger, missing.batch, fingerprint, Path(folder), names)
        return Exported(count, missing.label)


def import_results(study: Study, folder: str | Path) -> ImportReport:
    """Keep the results in an exported folder that fit the runs that are missing now."""
    from nipc.runs.exchange import import_runs

    with _waiting(study) as (ledger, missing, fingerprint):
        if missing is None:
            raise InputError("nothing of this study is missing: there is nothing to import")
        return import_runs(ledger, missing.batch, fingerprint, Path(folder), missing.label)


@contextmanager
def _waiting(study: Study) -> Iterator[tuple[Ledger, MissingRuns | None, str]]:
    """The study's ledger, open; the first batch of runs that it lacks; the propagator's print."""
    from nipc.chain.single_arc import solve
    from nipc.runs.kept import KeptRuns, MissingRuns
    from nipc.runs.ledger import Ledger

    propagator, quantities = build_propagator(study), build_quantities(study)
    with Ledger.open(work_folder(study)) as ledger:
        found = None
        with KeptRuns(propagator, ledger) as engine:
            try:
                if study.chain.arcs == 1:
                    solve(study, engine, quantities)
                else:
                    solved_chain(study, engine, quantities)[0].table()
            except MissingRuns as missing:
                found = missing
        yield ledger, found, propagator.fingerprint()
