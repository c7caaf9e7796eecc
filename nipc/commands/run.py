"""`nipc run`."""

from __future__ import annotations

import json
from enum import StrEnum
from typing import Annotated

import typer

from nipc.commands.options import AsJson, Jobs, Quiet, StudyFile, next_steps, progress_of, quoted
from nipc.errors import InputError, RunsError


class Where(StrEnum):
    """Where runs are made."""

    LOCAL = "local"
    DASK = "dask"


def run(
    study: StudyFile,
    jobs: Jobs = 1,
    quiet: Quiet = False,
    as_json: AsJson = False,
    page: Annotated[bool, typer.Option(help="Write the page as well.")] = True,
    retry_failed: Annotated[
        bool, typer.Option("--retry-failed", help="Make runs anew that failed before.")
    ] = False,
    engine: Annotated[
        Where, typer.Option(help="Where runs are made: on this machine, or on a Dask cluster.")
    ] = Where.LOCAL,
    scheduler: Annotated[
        str | None,
        typer.Option(metavar="ADDRESS", help="The cluster's, as `dask scheduler` prints it."),
    ] = None,
) -> None:
    """Run a study: the program it names is run, and a page and data are written.

    They go to a folder beside the study, study.work for study.toml.
    Every finished run is kept there: stop with Ctrl-C, start again, and it
    goes on where it was.
    """
    from nipc.terminal import console, show_result
    from nipc.workflow import load_study, write_report
    from nipc.workflow import run as run_study

    if jobs == 0:
        raise InputError("--jobs 0: give 1 or more, or -1 for one a processor")
    if (engine is Where.DASK) != (scheduler is not None):
        raise InputError("--engine dask and --scheduler ADDRESS go together: give both or neither")
    loaded = load_study(study)
    try:
        result = run_study(
            loaded,
            n_jobs=jobs,
            progress=progress_of(quiet or as_json),
            backend="dask" if engine is Where.DASK else "processes",
            scheduler=scheduler,
            retry_failed=retry_failed,
        )
    except RunsError as error:
        remedy = f"Mend it and start again; all reasons so far: nipc status {quoted(study)}"
        raise RunsError(f"{error}\n{remedy}") from error
    written = write_report(result) if page else None
    if as_json:
        print(json.dumps(result.summary))
    elif not quiet:
        show_result(console(), result, written, quoted(study))
        figures = f"nipc report {quoted(study)} --figures"
        next_steps(*["open the page in a browser"] * page, f"{figures}  # as files")
