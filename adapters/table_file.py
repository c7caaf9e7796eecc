"""Tables that programs print: Fortran's numbers, columns that touch, headers, comments."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import PropagatorError

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
# 1.234-105: Fortran drops the letter of an exponent with three digits
_LETTERLESS = re.compile(r"([+-]?\d*\.\d*)([+-]\d{2,4})", re.ASCII)
_SPECIAL = {"nan", "inf", "infinity", "+inf", "-inf", "+infinity", "-infinity"}


def number(word: str) -> float:
    """A number as Fortran or C prints it; ValueError when it is none."""
    text = word.strip()
    exponent = re.sub(r"[dDqQ]", "E", text, count=1)
    if _NUMBER.fullmatch(exponent):
        return float(exponent)
    match = _LETTERLESS.fullmatch(text)
    if match:
        return float(f"{match[1]}E{match[2]}")
    if text.lower() in _SPECIAL:
        return float(text)
    raise ValueError(word)


def read_lines(path: Path) -> list[str]:
    """The lines of a file that the program should have written."""
    try:
        return path.read_text(encoding="utf-8", errors="replace").splitlines()
    except FileNotFoundError:
        raise PropagatorError(f"the program wrote no file {path.name}") from None
    except OSError as error:
        raise PropagatorError(f"cannot read {path.name}: {error.strerror}") from None


def read_rows(
    path: Path,
    columns: Sequence[int],
    *,
    skip: int = 0,
    comment: str = "#",
    widths: Sequence[int] | None = None,
) -> FloatArray:
    """Chosen columns (counted from 1) of all rows: (rows, columns).

    Fields are separated by commas where a line has any, else by blanks; or they are of fixed
    widths. PropagatorError with the file, line and field of what is no number.
    """
    rows = []
    for count, line in enumerate(read_lines(path), start=1):
        if count <= skip or not line.strip() or (comment and line.lstrip().startswith(comment)):
            continue
        fields = _cut(line, widths)
        row = []
        for column in columns:
            where = f"{path.name}, line {count}, field {column}"
            if column > len(fields):
                raise PropagatorError(f"{where}: the line has only {len(fields)} fields")
            row.append(field_value(fields[column - 1], where))
        rows.append(row)
    return np.array(rows, dtype=float).reshape(len(rows), len(columns))


def field_value(word: str, where: str) -> float:
    """The number in a field; PropagatorError says where it is none, and why."""
    try:
        return number(word)
    except ValueError:
        pass
    if not word.strip():
        hint = "the field is empty; a number is expected"
    elif set(word.strip()) == {"*"}:
        hint = "the program's format is too narrow for the number"
    elif re.fullmatch(r"[-+.\dEeDd]*\d[-+]\d[-+.\dEeDd]*", word.strip()):
        hint = "fields that touch: give their widths"
    else:
        hint = "a number is expected"
    raise PropagatorError(f"{where}: found {word.strip()[:40]!r}; {hint}")


def read_matches(path: Path, pattern: re.Pattern[str]) -> FloatArray:
    """The groups of every match in the file: (matches, groups)."""
    text = "\n".join(read_lines(path))
    rows = []
    for match in pattern.finditer(text):
        line = text.count("\n", 0, match.start()) + 1
        rows.append(
            [
                field_value(word or "", f"{path.name}, line {line}, group {k} of the pattern")
                for k, word in enumerate(match.groups(), start=1)
            ]
        )
    return np.array(rows, dtype=float).reshape(len(rows), pattern.groups)


def _cut(line: str, widths: Sequence[int] | None) -> list[str]:
    if widths is None:
        return line.split(",") if "," in line else line.split()
    fields, place = [], 0
    for width in widths:
        if place >= len(line):
            break
        fields.append(line[place : place + width])
        place += width
    return fields
