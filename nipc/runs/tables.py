"""Plain tables of numbers, as other programs write them."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray


class TableError(Exception):
    """A table cannot be used; the message says why."""


def read_table(path: Path) -> tuple[tuple[str, ...], FloatArray]:
    """Headings (empty where there are none) and numbers (lines, columns).

    Columns are parted by commas, semicolons, tabs or blanks; `#` begins a comment; Fortran's D
    exponents are read.
    """
    try:
        text = path.read_text(encoding="utf-8", errors="strict")
    except (OSError, UnicodeError) as error:
        raise TableError(f"{path.name} cannot be read ({error})") from None
    heads: tuple[str, ...] = ()
    rows: list[list[float]] = []
    for number, line in enumerate(text.splitlines(), start=1):
        words = _words(line)
        if not words:
            continue
        try:
            rows.append([float(word.replace("D", "E").replace("d", "e")) for word in words])
        except ValueError:
            if rows or heads:
                raise TableError(
                    f"{path.name}, line {number}: {line.strip()[:60]!r} is not a line of numbers"
                ) from None
            heads = tuple(words)
            continue
        if len(rows[-1]) != len(rows[0]):
            raise TableError(
                f"{path.name}, line {number}: {len(rows[-1])} numbers; the first line has"
                f" {len(rows[0])}"
            )
    if not rows:
        raise TableError(f"{path.name} holds no numbers")
    return heads, np.array(rows)


def read_numbers(path: Path) -> FloatArray:
    """Only the numbers."""
    return read_table(path)[1]


def _words(line: str) -> list[str]:
    line = line.split("#", 1)[0]
    for mark in (";", "\t", ","):
        if mark in line:
            return [word.strip().strip('"') for word in line.split(mark)]
    return line.split()
