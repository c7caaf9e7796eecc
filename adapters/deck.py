"""Input files of a program, written from templates."""

from __future__ import annotations

import string
from pathlib import Path, PurePosixPath
from typing import Annotated

import numpy as np
from pydantic import AfterValidator

from nipc.arrays import FloatArray
from nipc.errors import InputError


def _inside(name: str) -> str:
    path = PurePosixPath(name.replace("\\", "/"))
    if not name or path.is_absolute() or ".." in path.parts or ":" in name or "\0" in name:
        raise ValueError(
            f"{name!r} does not stay in the run's scratch folder: give a plain relative name"
        )
    return name


ScratchName = Annotated[str, AfterValidator(_inside)]


class Deck(string.Template):
    """A template with $name or ${name}; $$ stands for a dollar sign."""

    idpattern = r"(?a:[_a-zA-Z][_a-zA-Z0-9]*)"


def formatted(value: float, style: str, fortran: bool) -> str:
    """A number as the program reads it; with `fortran` its exponent is a D."""
    text = style % value
    return text.replace("e", "D").replace("E", "D") if fortran else text


def check_template(text: str, known: set[str], name: str) -> None:
    """InputError when the template names what there is not."""
    template = Deck(text)
    if not template.is_valid():
        raise InputError(f"template {name}: a lone $; write $$ for a dollar sign itself")
    unknown = sorted(set(template.get_identifiers()) - known)
    if unknown:
        raise InputError(
            f"template {name}: unknown {', '.join('$' + u for u in unknown)}; known: "
            + ", ".join("$" + k for k in sorted(known))
        )


def write_table(
    path: Path, times: FloatArray, values: FloatArray, style: str, fortran: bool
) -> None:
    """A table of t, xi_1 ... xi_J, a row a time."""
    rows = np.column_stack([times, values])
    text = "\n".join(" ".join(formatted(v, style, fortran) for v in row) for row in rows)
    path.write_text(text + "\n", encoding="ascii")
