"""`nipc import`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from nipc.commands.options import StudyFile, next_steps, quoted


def take_in(
    study: StudyFile,
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="As exported.", show_default=False)
    ],
) -> None:
    """Keep the results of runs that were exported and made elsewhere.

    Each is checked against its key: what does not fit is refused, with the
    reason. The exit code is 1 when any was refused.
    """
    from nipc.elsewhere import import_results
    from nipc.workflow import load_study

    report = import_results(load_study(study), folder)
    print(report)
    if report.absent or report.refused:
        next_steps(f"the rest, then the same again: nipc import {quoted(study)} {quoted(folder)}")
    else:
        next_steps(f"nipc export {quoted(study)} ANOTHER_FOLDER  # what is missing next, if any")
    if report.refused:
        raise typer.Exit(1)
