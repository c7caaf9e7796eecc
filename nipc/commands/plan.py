"""`nipc plan`."""

from __future__ import annotations

import json
import os

from nipc.commands.options import AsJson, StudyFile, next_steps, quoted


def plan(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how many runs a study will take, before any is made.

    Also what each noise basis would lose at the chosen number of terms.
    Neither your propagator nor any other code of yours is run.
    """
    from nipc.terminal import console, show_plan
    from nipc.workflow import load_study
    from nipc.workflow import plan as make_plan

    made = make_plan(load_study(study))
    if as_json:
        print(json.dumps(made.as_dict()))
        return
    show_plan(console(), made)
    print()
    file = quoted(study)
    next_steps(f"nipc probe {file}", f"nipc run {file} --jobs {os.cpu_count() or 1}")
