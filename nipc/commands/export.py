"""`nipc export`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from nipc.commands.options import StudyFile, next_steps, quoted


def export(
    study: StudyFile,
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="A new folder.", show_default=False)
    ],
) -> None:
    """Write the runs that are missing next, for a machine that nipc cannot reach.

    A table of all of them, and for each a folder with a card (everything that
    determines the run) and its noise. Put a result.csv beside each card: a
    line a time, t and the state; then import the folder. Arcs follow each
    other, so export again until nothing is missing.
    """
    from nipc.elsewhere import export_missing
    from nipc.workflow import load_study

    written = export_missing(load_study(study), folder)
    if not written.runs:
        print("Nothing is missing.")
        next_steps(f"nipc run {quoted(study)}")
        return
    print(f"{written.runs} runs ({written.label}) written to {folder}")
    next_steps(
        "put result.csv beside each card.toml", f"nipc import {quoted(study)} {quoted(folder)}"
    )
