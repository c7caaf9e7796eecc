"""Runs done elsewhere, on a machine that nipc cannot reach.

`export_runs` writes what is missing: `runs.csv`, one line a run; `times.csv`; and a folder for each
run with `card.toml` (everything that determines it, and its key) and `forcing.csv` (t, xi_1 ...).
Whoever runs them puts `result.csv` beside each card: t and the state, one line a time, separated by
commas or blanks, with or without a heading; where the motion ended for a physical reason, the lines
up to then and a line `# ended T`. `import_runs` takes back what fits its key.
"""

from __future__ import annotations

import csv
import json
import re
import tomllib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError
from nipc.runs.keys import run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import Batch
from nipc.runs.record import Record, Status
from nipc.runs.tables import TableError, read_numbers

CARD, FORCING, RESULT, TABLE, TIMES = (
    "card.toml", "forcing.csv", "result.csv", "runs.csv", "times.csv",
)  # fmt: skip
_START_TOLERANCE = 1e-6  # of the start's size: formats of few digits pass, another run does not
_TIME_TOLERANCE = 1e-9  # of the arc
_AT_ONCE = 256


@dataclass(frozen=True)
class Names:
    """What a study calls the columns of a batch."""

    states: tuple[str, ...]
    parameters: tuple[str, ...]


@dataclass(frozen=True)
class ImportReport:
    """What `import_runs` did; `refused` has a run's folder and why, `absent` are without result."""

    accepted: int
    known: int
    refused: tuple[tuple[str, str], ...]
    absent: int

    def __str__(self) -> str:
        text = f"{self.accepted} runs taken in, {self.absent} without a result yet"
        if self.known:
            text += f", {self.known} known already"
        if self.refused:
            text += f", {len(self.refused)} refused:"
            text += "".join(f"\n  {folder}: {why}" for folder, why in self.refused)
        return text


def export_runs(
    ledger: Ledger,
    batch: Batch,
    fingerprint: str,
    folder: Path,
    names: Names,
    forcing_times: FloatArray | None = None,
) -> int:
    """Write what the ledger lacks of this batch into a new folder; how many runs.

    `forcing_times` are those of the forcing tables; the batch's own where None.
    """
    keys = run_keys(batch, fingerprint)
    known = ledger.find(keys)
    first = {key: row for row, key in reversed(list(enumerate(keys)))}
    rows = sorted(
        row for key, row in first.items() if key not in known or known[key][0] is not Status.DONE
    )
    _new_folder(folder)
    heads = ["run", "key", *names.states, *batch.forcing.labels, *names.parameters]
    grid = batch.times if forcing_times is None else forcing_times
    _write_table(folder / TIMES, ["t"], batch.times[:, None])
    with (folder / TABLE).open("w", newline="") as file:
        table = csv.writer(file)
        table.writerow(heads)
        for number, row in enumerate(rows, start=1):
            name = f"run-{number:06d}"
            start, coefficients, parameters = (
                values[row].tolist()
                for values in (batch.states, batch.forcing.coefficients, batch.parameters)
            )
            table.writerow([name, keys[row].hex(), *start, *coefficients, *parameters])
            home = folder / name
            home.mkdir()
            card = _card(keys[row], batch, row, names)
            (home / CARD).write_text(card, encoding="utf-8")
            path = batch.forcing.take(slice(row, row + 1)).table(grid)[0]
            _write_table(home / FORCING, ["t", *batch.forcing.names], np.c_[grid, path])
    return len(rows)


def _new_folder(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: cannot be made ({error.strerror})") from None
    if any(folder.iterdir()):
        raise InputError(f"{folder}: is not empty; give a new folder, lest results be mixed up")


def _card(key: bytes, batch: Batch, row: int, names: Names) -> str:
    """Everything that determines one run; numbers are written so that they read back exactly."""

    def table(title: str, heads: Sequence[str], values: FloatArray) -> str:
        lines = [f"{json.dumps(h)} = {v!r}" for h, v in zip(heads, values.tolist(), strict=True)]
        return "\n".join([f"\n[{title}]", *lines, ""])

    return "".join(
        [
            f'key = "{key.hex()}"\n',
            f"times = {batch.times.tolist()!r}\n",
            table("start", names.states, batch.states[row]),
            table("coefficients", batch.forcing.labels, batch.forcing.coefficients[row]),
            table("parameters", names.parameters, batch.parameters[row]),
        ]
    )


def _write_table(path: Path, heads: Sequence[str], values: FloatArray) -> None:
    with path.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(heads)
        writer.writerows(values.tolist())


def import_runs(
    ledger: Ledger, batch: Batch, fingerprint: str, folder: Path, label: str = "import"
) -> ImportReport:
    """Keep the results found in an exported folder, each checked against its key.

    A result is refused when its card is not of this batch, when the card was altered, or when its
    table has other times, another start, too few columns or values that are not finite.
    """
    if not folder.is_dir():
        raise InputError(f"{folder}: is not a folder")
    keys = {key: row for row, key in enumerate(run_keys(batch, fingerprint))}
    known = ledger.find(list(keys))
    done = {key for key, state in known.items() if state[0] is Status.DONE}
    number = ledger.begin(batch, fingerprint, label, len(batch), len(done))
    refused: list[tuple[str, str]] = []
    records: list[Record] = []
    accepted = repeated = absent = 0
    for home in _homes(folder):
        if not (home / RESULT).is_file():
            absent += 1
            continue
        try:
            record = _taken_in(home, batch, keys)
        except TableError as error:
            refused.append((home.name, str(error)))
            continue
        if record.key in done:
            repeated += 1
            continue
        done.add(record.key)
        records.append(record)
        accepted += 1
        if len(records) >= _AT_ONCE:
            ledger.write(records, number)
            records = []
    ledger.write(records, number)
    return ImportReport(accepted, repeated, tuple(refused), absent)


def _homes(folder: Path) -> Iterator[Path]:
    return (home for home in sorted(folder.glob("run-*")) if (home / CARD).is_file())


def _taken_in(home: Path, batch: Batch, keys: dict[bytes, int]) -> Record:
    """The record of one result; TableError says why it does not fit."""
    key, values = _read_card(home / CARD)
    row = keys.get(key)
    if row is None:
        raise TableError(
            "its key is not one of this study's runs: the study, the propagator's settings or its"
            " files have changed since the export"
        )
    start, coefficients = batch.states[row], batch.forcing.coefficients[row]
    parameters = batch.parameters[row]
    if not np.array_equal(values, np.concatenate([start, coefficients, parameters])):
        raise TableError("the numbers on its card are not those that its key stands for")
    m, d = batch.times.size, start.size
    table, ended = read_numbers(home / RESULT), _ending(home / RESULT)
    wanted = m if np.isnan(ended) else int(np.sum(batch.times <= ended))
    if table.shape != (wanted, d + 1):
        raise TableError(
            f"{RESULT} has {table.shape[0]} lines of {table.shape[1]} numbers; right is {wanted}"
            f" lines of {d + 1}: t and the {d} state components"
        )
    late = np.abs(table[:, 0] - batch.times[:wanted]).max()
    if not late <= _TIME_TOLERANCE * max(1.0, float(np.abs(batch.times).max())):
        raise TableError(f"{RESULT} has other times than the card (by up to {late:.3g})")
    if not np.isfinite(table).all():
        raise TableError(f"{RESULT} holds values that are not finite")
    off = np.abs(table[0, 1:] - start).max(initial=0.0)
    if off > _START_TOLERANCE * max(np.abs(start).max(initial=0.0), 1e-300):
        raise TableError(f"{RESULT} starts elsewhere than the card (by up to {off:.3g})")
    states = np.full((m, d), np.nan)
    states[:wanted] = table[:, 1:]
    return Record(
        key=key, status=Status.DONE, start=start, coefficients=coefficients, parameters=parameters,
        states=states, ended=ended, host="imported",
    )  # fmt: skip


def _ending(path: Path) -> float:
    """The time in a line `# ended T`, NaN where there is none."""
    found = re.findall(r"^#\s*ended\s+(\S+)\s*$", path.read_text(encoding="utf-8"), re.MULTILINE)
    try:
        return float(found[-1]) if found else float("nan")
    except ValueError:
        raise TableError(f"{RESULT}: `# ended {found[-1]}` gives no time") from None


def _read_card(path: Path) -> tuple[bytes, FloatArray]:
    try:
        card = tomllib.loads(path.read_text(encoding="utf-8"))
        values = [
            float(value)
            for title in ("start", "coefficients", "parameters")
            for value in card[title].values()
        ]
        return bytes.fromhex(card["key"]), np.array(values)
    except (OSError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise TableError(f"{CARD} cannot be read ({error})") from None
