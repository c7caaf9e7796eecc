"""Why each arc is as it is: kept beside the runs while a chain grows, to be looked at meanwhile."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

FILE_NAME = "arcs.json"


@dataclass(frozen=True)
class ArcRecord:
    """Why an arc is as it is.

    `error` is held out, at the arc's end, over the spread there, `allowed` what it might be; `runs`
    are the design's, `failed` of them gave nothing; `direct` members of the pool were run directly.
    """

    start: float
    end: float
    degree: int
    terms: int
    runs: int
    error: float
    note: str
    failed: int = 0
    direct: int = 0
    allowed: float = math.nan


def write_records(folder: Path, records: Sequence[ArcRecord]) -> None:
    """Put the arcs built so far into the folder, whole or not at all."""
    rows = [asdict(record) for record in records]
    part = folder / f"{FILE_NAME}.part"
    part.write_text(json.dumps(rows), encoding="utf-8")
    part.replace(folder / FILE_NAME)


def read_records(folder: Path) -> list[ArcRecord]:
    """The arcs of the chain that was built last here, none where there is no such file."""
    try:
        rows = json.loads((folder / FILE_NAME).read_text(encoding="utf-8"))
        return [ArcRecord(**row) for row in rows]
    except (OSError, ValueError, TypeError):
        return []  # one of another version, or damaged: it is written anew with the next arc


def alike(records: Sequence[ArcRecord]) -> list[list[ArcRecord]]:
    """Successive arcs of the same length, degree, terms and note, together."""
    groups: list[list[ArcRecord]] = []
    for record in records:
        if groups and _kind(groups[-1][0]) == _kind(record):
            groups[-1].append(record)
        else:
            groups.append([record])
    return groups


def _kind(record: ArcRecord) -> tuple[float, int, int, int, str]:
    length = float(f"{record.end - record.start:.6g}")
    return (length, record.degree, record.terms, record.runs, record.note)
