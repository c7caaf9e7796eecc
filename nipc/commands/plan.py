"""`nipc plan`."""

from __future__ import annotations

import json
import os
from typing import Annotated

import typer

from nipc.commands.options import AsJson, Jobs, StudyFile, next_steps, quoted
from nipc.errors import InputError


def plan(
    study: StudyFile,
    pilot: Annotated[
        bool,
        typer.Option(
            "--pilot",
            help="Run your propagator a few times to tell how long all will take, and what "
            "degrees the arcs of a chain may need.",
        ),
    ] = False,
    charts: Annotated[
        bool,
        typer.Option(
            "--charts",
            help="Run your propagator a few times over the whole horizon to tell in which "
            "chart the motion is closest to linear.",
        ),
    ] = False,
    jobs: Jobs = 1,
    as_json: AsJson = False,
) -> None:
    """Tell how many runs a study will take, before any is made.

    Also what each noise basis would lose at the chosen number of terms.
    Without --pilot and --charts neither your propagator nor any other code of
    yours is run; with them the program that the study names is.
    """
    from dataclasses import asdict

    from nipc.terminal import console, show_charts, show_pilot, show_plan
    from nipc.workflow import load_study
    from nipc.workflow import plan as make_plan

    if jobs == 0:
        raise InputError("--jobs 0: give 1 or more, or -1 for one a processor")
    loaded = load_study(study)
    made = make_plan(loaded)
    found = None
    if pilot:
        from nipc.pilot import pilot as make_pilot

        found = make_pilot(loaded, made, jobs)
    chosen = None
    if charts:
        from nipc.chart_choice import choose_chart

        chosen = choose_chart(loaded)
    if as_json:
        tail = {} if found is None else {"pilot": found.as_dict()}
        tail |= {} if chosen is None else {"charts": asdict(chosen)}
        print(json.dumps(made.as_dict() | tail))
        return
    show_plan(console(), made)
    if found is not None:
        print()
        show_pilot(console(), found)
    if chosen is not None:
        print()
        show_charts(console(), chosen)
    print()
    file = quoted(study)
    next_steps(f"nipc probe {file}", f"nipc run {file} --jobs {os.cpu_count() or 1}")
