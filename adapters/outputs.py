"""What a program has written, read back as states at the times that were asked for."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from nipc.adapters.deck import ScratchName
from nipc.adapters.table_file import read_matches, read_rows
from nipc.arrays import FloatArray
from nipc.errors import PropagatorError

Column = Annotated[int, Field(ge=1)]


class OutputTable(BaseModel):
    """Where states are read: columns counted from 1, or the groups of a regular expression.

    `components`: what they are, by default all state components in order. `rows` tells which rows
    there are: "times", one an output time in their order; "matching", any number, of which those
    whose time_column agrees are taken; "final", one, the end of the run (the program is then called
    from one output time to the next). `first_row`: the first of them is the start. In a batch the
    rows come run after run, or `run_column` numbers them from 1. `short_is_lost`: a run whose rows
    stop early ended there for a physical reason; with first_row, none at all is a failure.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    columns: tuple[Column, ...] = ()
    pattern: str | None = None
    components: tuple[str, ...] | None = None
    rows: Literal["times", "matching", "final"] = "times"
    time_column: Column | None = None
    time_tolerance: Annotated[float, Field(gt=0)] | None = None
    run_column: Column | None = None
    widths: tuple[Column, ...] | None = None
    skip: Annotated[int, Field(ge=0)] = 0
    comment: Annotated[str, Field(max_length=4)] = "#"
    first_row: bool = True
    short_is_lost: bool = False

    @field_validator("pattern")
    @classmethod
    def _compiles(cls, value: str | None) -> str | None:
        if value is not None:
            try:
                groups = re.compile(value, re.MULTILINE).groups
            except re.error as error:
                raise ValueError(f"not a regular expression: {error}") from None
            if groups == 0:
                raise ValueError("the pattern has no group (...) around the number to be read")
        return value

    @model_validator(mode="after")
    def _consistent(self) -> OutputTable:
        if bool(self.columns) == (self.pattern is not None):
            raise ValueError("give one of columns and pattern")
        extra = [k for k in ("time_column", "run_column", "widths") if getattr(self, k) is not None]
        if self.pattern is not None and extra:
            raise ValueError(f"{extra[0]} belongs to a table, and this is read by pattern")
        if self.rows == "matching" and self.time_column is None:
            raise ValueError('rows = "matching" needs time_column, to find the rows by')
        return self

    @property
    def count(self) -> int:
        """How many components are read."""
        if self.pattern is None:
            return len(self.columns)
        return re.compile(self.pattern, re.MULTILINE).groups

    def read(
        self, path: Path, times: FloatArray, runs: int, lost: bool, scale: tuple[float, float]
    ) -> list[RunRows]:
        """Rows of each of `runs` runs at `times`; `scale` is (offset, factor) of printed times."""
        wanted = times[-1:] if self.rows == "final" else times if self.first_row else times[1:]
        values, stamps, numbers = self._rows(path, scale)
        if numbers is None and (runs == 1 or len(values) == runs * wanted.size):
            parts = np.array_split(np.arange(len(values)), runs)
        elif numbers is None:
            raise PropagatorError(
                f"{path.name} has {len(values)} rows; {runs} runs of {wanted.size} rows are "
                "expected (with run_column they may be fewer)"
            )
        else:
            odd = numbers[(numbers != np.round(numbers)) | (numbers < 1) | (numbers > runs)]
            if odd.size:
                raise PropagatorError(
                    f"{path.name}: run number {odd[0]:g} in field {self.run_column}; they are "
                    f"1 to {runs}"
                )
            parts = [np.flatnonzero(numbers == k) for k in range(1, runs + 1)]
        first = times.size - wanted.size
        result = []
        for k, part in enumerate(parts, start=1):
            name = path.name if runs == 1 else f"{path.name}, run {k}"
            own = None if stamps is None else stamps[part]
            # a table without even its start tells of a program that failed, not of a loss
            short = lost or (self.short_is_lost and (first > 0 or part.size > 0))
            result.append(self._pick(name, values[part], own, wanted, times, short, first))
        return result

    def _rows(
        self, path: Path, scale: tuple[float, float]
    ) -> tuple[FloatArray, FloatArray | None, FloatArray | None]:
        """(values, times or None, run numbers or None), a row each."""
        if self.pattern is not None:
            return read_matches(path, re.compile(self.pattern, re.MULTILINE)), None, None
        columns = [*self.columns]
        for extra in (self.time_column, self.run_column):
            columns += [extra] if extra is not None else []
        rows = read_rows(
            path, columns, skip=self.skip, comment=self.comment, widths=self.widths
        )  # fmt: skip
        values, rest = rows[:, : len(self.columns)], rows[:, len(self.columns) :]
        stamps = (rest[:, 0] - scale[0]) / scale[1] if self.time_column is not None else None
        # NaN compares as neither near nor far, and argmin takes it for the nearest
        if stamps is not None and not np.isfinite(stamps).all():
            row = int(np.argmin(np.isfinite(stamps)))
            raise PropagatorError(
                f"{path.name}, row {row + 1}: its time is {rest[row, 0]:g}; a number is expected"
            )
        return values, stamps, rest[:, -1] if self.run_column is not None else None

    def _pick(
        self,
        name: str,
        values: FloatArray,
        stamps: FloatArray | None,
        wanted: FloatArray,
        times: FloatArray,
        short: bool,
        first: int,
    ) -> RunRows:
        tolerance = self.time_tolerance or 1e-4 * float(np.min(np.diff(times)))
        if self.rows == "matching" and stamps is not None and len(values):
            nearest = np.abs(stamps[None] - wanted[:, None]).argmin(axis=1)
            off = np.abs(stamps[nearest] - wanted) > tolerance
            known = int(np.argmax(off)) if off.any() else wanted.size
            last = float(stamps.max())
            if off[known:].any() and not (short and wanted[known] > last):
                raise PropagatorError(
                    f"{name} has no row for t = {wanted[known]:g}; the nearest is "
                    f"t = {stamps[nearest[known]]:g} (time_tolerance is {tolerance:g})"
                )
            end = last if known < wanted.size and last > _before(wanted, times, known) else None
            return RunRows(first, values[nearest[:known]], end)
        end = None
        if short and stamps is not None and 0 < len(values) <= wanted.size:
            # the last row of a lost run may tell when it was lost
            k = len(values) - 1
            if abs(stamps[k] - wanted[k]) > tolerance and stamps[k] < wanted[k]:
                values, end, stamps = values[:-1], float(stamps[k]), stamps[:-1]
        count = len(values)
        if count > wanted.size or (count < wanted.size and not short):
            raise PropagatorError(
                f"{name} has {count} rows; {wanted.size} are expected, "
                + ("the end of the run" if self.rows == "final" else "one an output time")
                + (" and the start" if self.first_row and self.rows != "final" else "")
            )
        if stamps is not None:
            off = np.abs(stamps - wanted[:count]) > tolerance
            if off.any():
                row = int(np.argmax(off))
                raise PropagatorError(
                    f"{name}, row {row + 1}: its time is {stamps[row]:g}; {wanted[row]:g} is "
                    f"expected (time_tolerance is {tolerance:g})"
                )
        return RunRows(first, values, end)


@dataclass(frozen=True, eq=False)
class RunRows:
    """Values (k, c) of one run from times[first] on; `lost` is its end, where that is told."""

    first: int
    values: FloatArray
    lost: float | None

    @property
    def reach(self) -> int:
        """How many of the run's times are known."""
        return self.first + len(self.values)


def _before(wanted: FloatArray, times: FloatArray, known: int) -> float:
    return float(wanted[known - 1] if known else times[0])


def end_between(times: FloatArray, reach: int, told: float | None) -> float:
    """When a run ended of which `reach` times are known: as told, else midway to the next."""
    if told is not None:
        return told
    if reach >= times.size:
        return float(times[-1])
    reach = max(reach, 1)
    return float(0.5 * (times[reach - 1] + times[reach]))
