"""`nipc status`."""

from __future__ import annotations

import json

from nipc.commands.options import AsJson, StudyFile
from nipc.errors import InputError


def status(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how far a study is: runs done, failed and missing.

    Also from another terminal, while the runs go on.
    """
    from dataclasses import asdict

    from nipc.runs.status import status
    from nipc.workflow import load_study, work_folder

    folder = work_folder(load_study(study))
    if not folder.is_dir():
        raise InputError(
            f"{folder} is not there yet: nothing of this study has been run. Next: nipc run {study}"
        )
    found = status(folder)
    print(json.dumps(asdict(found)) if as_json else str(found))
