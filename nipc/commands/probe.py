"""`nipc probe`."""

from __future__ import annotations

import json

import typer

from nipc.commands.options import AsJson, StudyFile, next_steps, quoted


def probe(study: StudyFile, as_json: AsJson = False) -> None:
    """Try your propagator with a handful of runs before a night of them.

    Tells the time of a run, whether it gives the same twice, whether the
    noise is felt, whether a restart from the middle goes on as an undisturbed
    run does, and how many digits its output carries. This runs the program
    that the study names. The exit code is 1 when something needs a look.
    """
    from dataclasses import asdict

    from nipc.terminal import console, show_probe
    from nipc.workflow import load_study
    from nipc.workflow import probe as make_probe

    found = make_probe(load_study(study))
    if as_json:
        print(json.dumps({"good": found.good, **asdict(found)}))
    else:
        show_probe(console(), found)
        print()
        if found.good:
            next_steps(f"nipc run {quoted(study)}")
        else:
            print("Look at these before running.")
    if not found.good:
        raise typer.Exit(1)
