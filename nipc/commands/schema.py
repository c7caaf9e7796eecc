"""`nipc schema`."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer


def schema(
    file: Annotated[
        Path | None, typer.Argument(metavar="FILE", help="Where to write it; else it is printed.")
    ] = None,
) -> None:
    """Print the JSON Schema of study files, so that your editor completes them.

    A study whose first line is `#:schema study.schema.json` is completed by
    editors that know schemas of TOML files; `nipc new` writes both.
    """
    from nipc.errors import InputError
    from nipc.study_schema import study_schema

    text = json.dumps(study_schema(), indent=2) + "\n"
    if file is None:
        print(text, end="")
        return
    try:
        file.write_text(text, encoding="utf-8")
    except OSError as error:
        raise InputError(f"cannot write {file}: {error.strerror}") from None
