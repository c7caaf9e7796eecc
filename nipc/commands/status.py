"""`nipc status`."""

from __future__ import annotations

import json

from nipc.commands.options import AsJson, StudyFile
from nipc.errors import InputError


def status(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how far a study is: runs done, failed and missing, and arc by arc.

    Also from another terminal, while the runs go on.
    """
    from dataclasses import asdict

    from nipc.chain.records import read_records
    from nipc.runs.status import status
    from nipc.terminal import console, show_arcs
    from nipc.workflow import load_study, work_folder

    loaded = load_study(study)
    folder = work_folder(loaded)
    if not folder.is_dir():
        raise InputError(
            f"{folder} is not there yet: nothing of this study has been run. Next: nipc run {study}"
        )
    found, arcs = status(folder), read_records(folder)
    if as_json:
        print(json.dumps(asdict(found) | {"arcs": [asdict(arc) for arc in arcs]}))
        return
    print(found)
    if arcs:
        print()
        show_arcs(console(), arcs, loaded.clock.unit)
