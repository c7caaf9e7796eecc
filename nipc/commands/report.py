"""`nipc report`."""

from __future__ import annotations

from typing import Annotated

import typer

from nipc.commands.options import StudyFile


def report(
    study: StudyFile,
    figures: Annotated[
        bool, typer.Option("--figures", help="Write each figure as PNG, SVG and PDF as well.")
    ] = False,
) -> None:
    """Write the page again from the results that are kept; nothing is run."""
    from nipc.answers.result import load_result
    from nipc.workflow import load_study, work_folder
    from nipc.workflow import write_report as write

    folder = work_folder(load_study(study))
    page = write(load_result(folder), figures=figures)
    print(f"page     {page}")
    if figures:
        print(f"figures  {folder / 'figures'}")
