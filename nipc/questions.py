"""Questions to a solved study that need no new runs: what if, sweep, allowance."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from nipc.errors import InputError, NipcError
from nipc.problem.study import Study
from nipc.workflow import (
    build_propagator,
    build_quantities,
    solved_chain,
    study_text,
    work_folder,
)

if TYPE_CHECKING:
    import xarray as xr

    from nipc.answers.allowances import Event
    from nipc.answers.confirmation import Confirmed
    from nipc.answers.result import Result
    from nipc.answers.scaled import Scaled
    from nipc.runs.kept import KeptRuns
    from nipc.runs.progress import Progress


@dataclass(frozen=True)
class Reopened:
    """A solved study again as it was: its members at any scales, and its engine."""

    scaled: Scaled
    engine: KeptRuns
    folder: Path


@contextmanager
def reopened(
    study: Study,
    *,
    folder: str | Path | None = None,
    n_jobs: int = 1,
    progress: Progress | None = None,
    backend: str = "processes",
) -> Iterator[Reopened]:
    """The arcs of a solved study, fitted again to the runs that the ledger keeps.

    The same numbers as when it was run, and no run is made; NipcError says how many are missing
    when it was not solved to its end.
    """
    from nipc.answers.scaled import ScaledArc, ScaledChain
    from nipc.chain.single_arc import solve
    from nipc.runs.engine import FailurePolicy
    from nipc.runs.kept import KeptRuns, MissingRuns
    from nipc.runs.ledger import FILE_NAME, Ledger
    from nipc.runs.progress import Silent

    place = Path(folder) if folder is not None else work_folder(study)
    remedy = f"nipc run {_file(study)}"
    if not (place / FILE_NAME).exists():
        raise InputError(f"nothing of this study has been run yet; it needs its runs: {remedy}")
    quantities = build_quantities(study)
    policy = FailurePolicy(retries=study.runs.retries, tolerated=study.runs.tolerated_failures)
    with (
        Ledger.open(place) as ledger,
        KeptRuns(
            build_propagator(study),
            ledger,
            n_jobs=n_jobs,
            time_limit=study.runs.time_limit,
            policy=policy,
            progress=progress or Silent(),
            backend=backend,
        ) as engine,
    ):
        try:
            scaled: Scaled
            if study.chain.arcs == 1:
                scaled = ScaledArc(solve(study, engine, quantities), engine, quantities)
            else:
                scaled = ScaledChain(solved_chain(study, engine, quantities)[0])
        except MissingRuns as missing:
            count = "1 more run" if missing.count == 1 else f"{missing.count} more runs"
            notes = "".join(f" ({note})" for note in engine.notes)
            raise NipcError(
                f"the study needs at least {count}, at {missing.label}: {remedy}{notes}"
            ) from None
        yield Reopened(scaled, engine, place)


def _file(study: Study) -> str:
    """The study's file as it is typed from here."""
    path = study.folder / f"{study.name}.toml"
    return os.path.relpath(path) if path.exists() else "STUDY"


def whatif(
    study: Study,
    scale: Mapping[str, float] | None = None,
    box: Mapping[str, tuple[float, float]] | None = None,
    *,
    members: int | None = None,
    shares: bool = True,
    folder: str | Path | None = None,
) -> xr.Dataset:
    """Answers of a solved study with drivers scaled and boxes moved; no run is made.

    `scale` names noise sources, "start" or parameters, with the factor of each (1: as it is);
    `box` names quantities, with their new ends. The data are named as in results.nc. InputError for
    a name there is not, NipcError when the study lacks runs.
    """
    from nipc.answers.scales import scales_of
    from nipc.answers.whatif import what_if

    with reopened(study, folder=folder) as again:
        scales = scales_of(again.scaled.groups, scale or {})
        return what_if(again.scaled, scales, box, members, shares)


def compared(
    study: Study,
    scale: Mapping[str, float],
    box: Mapping[str, tuple[float, float]],
    *,
    members: int | None = None,
    folder: str | Path | None = None,
) -> tuple[xr.Dataset, xr.Dataset]:
    """`whatif`, and beside it the study as it stands: its kept result, or the same members."""
    from nipc.answers.scales import scales_of
    from nipc.answers.whatif import what_if

    with reopened(study, folder=folder) as again:
        scales = scales_of(again.scaled.groups, scale)
        now = what_if(again.scaled, scales, box, members)
        was = kept_result(study, again.folder)
        return now, what_if(again.scaled, scales_of(again.scaled.groups, {}), None, members) if (
            was is None
        ) else was.dataset


def kept_result(study: Study, folder: Path) -> Result | None:
    """The result in the work folder, if it is of this very study."""
    from nipc.answers.result import DATA, load_result

    if not (folder / DATA).exists():
        return None
    result = load_result(folder)
    return result if result.dataset.attrs.get("study") == study_text(study) else None


def sweep(
    study: Study,
    scales: Sequence[float],
    source: Sequence[str] = (),
    *,
    members: int | None = None,
    folder: str | Path | None = None,
) -> xr.Dataset:
    """Answers of a solved study at each of `scales`, in dimension `factor`; no run is made.

    All noise sources are scaled together, or those that `source` names. See
    `nipc.answers.sweep.sweep` for what it holds.
    """
    from nipc.answers.sweep import sweep as make

    with reopened(study, folder=folder) as again:
        return make(again.scaled, list(scales), list(source), members)


def allowance(
    study: Study,
    target: float = 0.95,
    *,
    event: Event = "inside",
    box_of: str | None = None,
    members: int | None = None,
    folder: str | Path | None = None,
) -> xr.Dataset:
    """The largest strength of each source at which P(event at the end) >= target; no run is made.

    `event`: "inside" (in the box at the end) or "survival" (in it at all output times). See
    `nipc.answers.allowances.allowances` for what is returned.
    """
    from nipc.answers.allowances import allowances

    with reopened(study, folder=folder) as again:
        return allowances(again.scaled, target, event, box_of, members)


def find_allowances(
    study: Study,
    target: float,
    *,
    event: Event = "inside",
    box_of: str | None = None,
    members: int | None = None,
    confirming: int = 0,
    n_jobs: int = 1,
    progress: Progress | None = None,
    folder: str | Path | None = None,
    backend: str = "processes",
) -> tuple[xr.Dataset, list[Confirmed], bool]:
    """`allowance`, kept in the study's result; with `confirming` direct runs at each that is found.

    Returns it, what the direct runs say, and whether there was a result to keep it in.
    """
    from nipc.answers.allowances import allowances
    from nipc.answers.confirmation import confirm

    with reopened(study, folder=folder, n_jobs=n_jobs, progress=progress, backend=backend) as again:
        data = allowances(again.scaled, target, event, box_of, members)
        confirmed: list[Confirmed] = []
        if confirming:
            with again.engine.allowing():
                confirmed = confirm(again.scaled, data, confirming)
        return data, confirmed, _keep(study, again.folder, data)


def _keep(study: Study, folder: Path, data: xr.Dataset) -> bool:
    """Enter allowances in the study's result, so that its findings and its page tell them."""
    from nipc.answers.result import Result
    from nipc.answers.verdict import findings

    result = kept_result(study, folder)
    if result is None:
        return False
    dataset = result.dataset
    for name, variable in data.data_vars.items():
        if variable.dims == ("source", "quantity"):
            attributes = variable.attrs | {k: data.attrs[k] for k in ("target", "event")}
            dataset[name] = (variable.dims, variable.values, attributes)
    dataset.coords["source_unit"] = ("source", data["source_unit"].values)
    dataset.attrs["findings"] = json.dumps(findings(dataset))
    Result(dataset, folder).save()
    return True
