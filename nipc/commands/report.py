"""`nipc report`."""

from __future__ import annotations

import json
from typing import Annotated

import typer

from nipc.commands.options import AsJson, Quiet, StudyFile


def report(
    study: StudyFile,
    figures: Annotated[
        bool, typer.Option("--figures", help="Write each figure as PNG, SVG and PDF as well.")
    ] = False,
    quiet: Quiet = False,
    as_json: AsJson = False,
) -> None:
    """Write the page again from the results that are kept; nothing is run."""
    from nipc.answers.result import load_result
    from nipc.workflow import load_study, work_folder
    from nipc.workflow import write_report as write

    folder = work_folder(load_study(study))
    page = write(load_result(folder), figures=figures)
    places = {"page": page} | ({"figures": folder / "figures"} if figures else {})
    if as_json:
        print(json.dumps({name: str(path) for name, path in places.items()}))
    elif not quiet:
        for name, path in places.items():
            print(f"{name:8} {path}")
