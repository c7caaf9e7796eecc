"""`nipc new`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from nipc.commands.options import Quiet, next_steps, quoted
from nipc.starter import Flavour


def new(
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="A new folder.", show_default=False)
    ],
    flavour: Annotated[
        Flavour,
        typer.Option(
            help="What your propagator is: a Python function that integrates by itself, the "
            "right-hand side of an ODE, or a program that reads and writes files."
        ),
    ] = Flavour.FUNCTION,
    quiet: Quiet = False,
) -> None:
    """Write a commented study and a small propagator, to change into yours.

    They run as they are.
    """
    from nipc.starter import write_starter

    study = write_starter(folder, flavour)
    if quiet:
        return
    print(f"Written to {folder}: {', '.join(sorted(p.name for p in folder.iterdir()))}")
    next_steps(f"nipc check {quoted(study)}", f"nipc run {quoted(study)}")
