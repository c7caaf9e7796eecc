"""`nipc check`."""

from __future__ import annotations

import json

from nipc.commands.options import AsJson, Quiet, StudyFile, next_steps, quoted


def check(study: StudyFile, quiet: Quiet = False, as_json: AsJson = False) -> None:
    """Look a study over: what is in it, or all that is wrong, by line.

    Neither your propagator nor any other code of yours is run.
    """
    from nipc.terminal import console, show_study
    from nipc.workflow import load_study

    loaded = load_study(study)
    if as_json:
        print(json.dumps({"file": str(study), "ok": True, "title": loaded.title}))
        return
    if quiet:
        return
    show_study(console(), loaded)
    print("\nNothing is wrong.")
    next_steps(f"nipc plan {quoted(study)}")
