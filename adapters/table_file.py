"""Tables that programs print: Fortran's numbers, columns that touch, headers, comments."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import PropagatorError

# 1.234-105: Fortran drops the letter of an exponent with three digits
_LETTERLESS = re.compile(r"^([+-]?\d*\.\d+)([+-]\d{2,3})$")


def number(word: str) -> float:
    """A number as Fortran or C prints it; ValueError when it is none."""
    text = word.strip().replace("D", "E").replace("d", "e")
    match = _LETTERLESS.match(text)
    return float(f"{match[1]}E{match[2]}" if match else text)


def read_rows(
    path: Path, columns: Sequence[int], *, skip: int, comment: str, widths: Sequence[int] | None
) -> FloatArray:
    """Chosen columns (counted from 1) of all rows: (rows, columns).

    Fields are separated by blanks, tabs or commas, or are of fixed widths. PropagatorError with the
    file, line and field of what is no number.
    """
    try:
        lines = path.read_text(encoding="utf-8", errors="replace").splitlines()
    except FileNotFoundError:
        raise PropagatorError(f"the program wrote no file {path.name}") from None
    rows = []
    for count, line in enumerate(lines, start=1):
        if count <= skip or not line.strip() or (comment and line.lstrip().startswith(comment)):
            continue
        fields = _cut(line, widths)
        row = []
        for column in columns:
            where = f"{path.name}, line {count}, field {column}"
            if column > len(fields):
                raise PropagatorError(f"{where}: the line has only {len(fields)} fields")
            word = fields[column - 1]
            try:
                row.append(number(word))
            except ValueError:
                hint = (
                    "the program's format is too narrow for the number"
                    if "*" in word
                    else "a number is expected"
                )
                raise PropagatorError(f"{where}: found {word.strip()!r}; {hint}") from None
        rows.append(row)
    return np.array(rows, dtype=float).reshape(len(rows), len(columns))


def _cut(line: str, widths: Sequence[int] | None) -> list[str]:
    if widths is None:
        return line.replace(",", " ").split()
    fields, place = [], 0
    for width in widths:
        if place >= len(line):
            break
        fields.append(line[place : place + width])
        place += width
    return fields
