"""A program as it is: input files from templates, a forcing table, an output table."""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import signal
import subprocess
import tempfile
from pathlib import Path
from typing import Annotated

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.deck import Deck, ScratchName, check_template, formatted, write_table
from nipc.adapters.table_file import read_rows
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

TAIL = 400  # characters of standard error that are kept when a run fails


class InputFile(BaseModel):
    """One input file, from a template beside the study or from text in the study."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    template: str | None = None
    text: str | None = None

    @model_validator(mode="after")
    def _one(self) -> InputFile:
        if (self.template is None) == (self.text is None):
            raise ValueError("give one of template and text")
        return self


class ForcingTable(BaseModel):
    """The noise as a table of t, xi_1 ... xi_J with a row every `step` of the clock's unit."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    step: Annotated[float, Field(gt=0)]
    header: bool = False


class OutputTable(BaseModel):
    """Where the states are read: columns counted from 1, a row an output time.

    The rows are those of the times asked for, in their order; with `time_column` each row's time is
    checked. `first_row`: the table's first row is the start.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    columns: Annotated[tuple[Annotated[int, Field(ge=1)], ...], Field(min_length=1)]
    time_column: Annotated[int, Field(ge=1)] | None = None
    widths: tuple[Annotated[int, Field(ge=1)], ...] | None = None
    skip: Annotated[int, Field(ge=0)] = 0
    comment: Annotated[str, Field(max_length=4)] = "#"
    first_row: bool = True


class ExecutableSettings(AdapterSettings):
    """The program, what it reads, what it writes.

    Templates may use $start, $end, $step (of the forcing table), $n_times, $times (a line each),
    and every state component and parameter by its name. `lost_exit_code`: with it the program says
    that the motion ended for a physical reason; the rows that it wrote are kept.
    """

    command: Annotated[tuple[str, ...], Field(min_length=1)]
    inputs: tuple[InputFile, ...] = ()
    forcing: ForcingTable | None = None
    output: OutputTable
    format: str = "%.17e"
    fortran_exponent: bool = False
    environment: dict[str, str] = Field(default_factory=dict)
    time_limit: Annotated[float, Field(gt=0)] | None = None
    lost_exit_code: Annotated[int, Field(ge=1, le=255)] | None = None
    depends: tuple[str, ...] = ()

    @field_validator("format")
    @classmethod
    def _formats(cls, value: str) -> str:
        try:
            text = value % 1.5
            float(text)
        except (TypeError, ValueError):
            raise ValueError(
                f"{value!r} does not print a number; write for example %.15e"
            ) from None
        return value


class ExecutablePropagator(Propagator):
    """One run of the program a run, each in a scratch folder of its own."""

    def __init__(self, settings: ExecutableSettings, context: AdapterContext) -> None:
        self.settings, self.context = settings, context
        self.command = (str(program_of(settings, context.folder)), *settings.command[1:])
        self.templates = {f.file: template_of(f, context.folder) for f in settings.inputs}

    def propagate(self, batch: Batch) -> Trajectories:
        self.context.scratch.mkdir(parents=True, exist_ok=True)
        folder = Path(tempfile.mkdtemp(prefix="run-", dir=self.context.scratch))
        try:
            self._write(batch, folder)
            code = self._call(folder)
            return self._read(batch, folder, code)
        finally:
            shutil.rmtree(folder, ignore_errors=True)

    def _write(self, batch: Batch, folder: Path) -> None:
        settings = self.settings

        def shown(value: float) -> str:
            return formatted(value, settings.format, settings.fortran_exponent)

        words = {
            "start": shown(batch.times[0]),
            "end": shown(batch.times[-1]),
            "n_times": str(batch.times.size),
            "times": "\n".join(shown(t) for t in batch.times),
        }
        words |= dict(zip(self.context.state_names, map(shown, batch.states[0]), strict=True))
        parameters = map(shown, batch.parameters[0])
        words |= dict(zip(self.context.parameter_names, parameters, strict=True))
        if settings.forcing is not None:
            grid = forcing_grid(batch.times[0], batch.times[-1], settings.forcing.step)
            words |= {"step": shown(grid[1] - grid[0]), "n_forcing": str(grid.size)}
            values = batch.forcing.table(grid)[0]
            target = self._target(folder, settings.forcing.file)
            write_table(target, grid, values, settings.format, settings.fortran_exponent)
            if settings.forcing.header:
                names = " ".join(self.context.source_names)
                target.write_text(f"# t {names}\n" + target.read_text())
        for file, text in self.templates.items():
            self._target(folder, file).write_text(Deck(text).substitute(words), encoding="utf-8")

    def _target(self, folder: Path, name: str) -> Path:
        target = folder / name
        target.parent.mkdir(parents=True, exist_ok=True)
        if not target.resolve().is_relative_to(folder.resolve()):
            raise PropagatorError(f"{name!r} leads out of the run's scratch folder")
        return target

    def _call(self, folder: Path) -> int:
        settings = self.settings
        try:
            process = subprocess.Popen(
                self.command, cwd=folder, stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL,
                stderr=subprocess.PIPE, env={**os.environ, **settings.environment},
                start_new_session=True,
            )  # fmt: skip
        except OSError as error:
            raise PropagatorError(f"cannot start {self.command[0]}: {error.strerror}") from None
        try:
            _, stderr = process.communicate(timeout=settings.time_limit)
        except subprocess.TimeoutExpired:
            raise PropagatorError(
                f"the program did not end within {settings.time_limit:g} s and was stopped"
            ) from None
        finally:
            # also when this process is interrupted: nothing that the program started is left
            if process.poll() is None:
                with contextlib.suppress(ProcessLookupError):
                    os.killpg(process.pid, signal.SIGKILL)
                process.wait()
        code = process.returncode
        if code not in (0, settings.lost_exit_code):
            tail = stderr.decode("utf-8", "replace").strip()[-TAIL:]
            how = f"signal {-code}" if code < 0 else f"exit code {code}"
            raise PropagatorError(f"the program ended with {how}" + (f": {tail}" if tail else ""))
        return code

    def _read(self, batch: Batch, folder: Path, code: int) -> Trajectories:
        output, times = self.settings.output, batch.times
        columns = list(output.columns)
        if output.time_column is not None:
            columns.append(output.time_column)
        rows = read_rows(
            self._target(folder, output.file), columns, skip=output.skip, comment=output.comment,
            widths=output.widths,
        )  # fmt: skip
        wanted = times if output.first_row else times[1:]
        lost = code != 0
        if rows.shape[0] > wanted.size or (rows.shape[0] < wanted.size and not lost):
            raise PropagatorError(
                f"{output.file} has {rows.shape[0]} rows; {wanted.size} are expected, one an output"
                f" time{' and the start' if output.first_row else ''}"
            )
        states = np.full((1, times.size, batch.states.shape[1]), np.nan)
        states[0, 0] = batch.states[0]
        first = 0 if output.first_row else 1
        states[0, first : first + rows.shape[0]] = rows[:, : len(output.columns)]
        if output.time_column is not None:
            self._check_times(rows[:, -1], wanted[: rows.shape[0]])
        ended = np.full(1, np.nan)
        if lost:
            # the time of loss lies between the last row that was written and the next
            ended[0] = times[min(first + rows.shape[0], times.size - 1)]
            states[0, times >= ended[0]] = np.nan
        return Trajectories(states, ended)

    def _check_times(self, found: FloatArray, wanted: FloatArray) -> None:
        span = max(float(np.ptp(wanted)), abs(float(wanted[-1])), 1e-300)
        off = np.abs(found - wanted) > 1e-5 * span
        if np.any(off):
            row = int(np.argmax(off))
            raise PropagatorError(
                f"{self.settings.output.file}: row {row + 1} is at time {found[row]:g}; "
                f"{wanted[row]:g} is expected"
            )

    def fingerprint(self) -> str:
        digest = hashlib.sha256()
        used = [Path(self.command[0]), *(self.context.folder / d for d in self.settings.depends)]
        for path in used:
            digest.update(path.read_bytes())
        for text in self.templates.values():
            digest.update(text.encode())
        names = (self.context.state_names, self.context.parameter_names)
        return f"executable {self.settings.model_dump_json()} {names} {digest.hexdigest()}"


def forcing_grid(start: float, end: float, step: float) -> FloatArray:
    """Times from start to end in equal steps of at most `step`."""
    count = max(1, int(np.ceil((end - start) / step - 1e-9)))
    return np.linspace(start, end, count + 1)


def program_of(settings: ExecutableSettings, folder: Path) -> Path:
    """The program's file: beside the study, absolute, or on the search path."""
    name = settings.command[0]
    beside = folder / name
    if beside.is_file():
        if not os.access(beside, os.X_OK):
            raise InputError(f"{beside} is there but cannot be executed: chmod +x it")
        return beside.resolve()
    found = shutil.which(name)
    if found is None:
        raise InputError(
            f"there is no program {name!r} in {folder} nor on the search path: build it first"
        )
    return Path(found)


def template_of(file: InputFile, folder: Path) -> str:
    """The template's text."""
    if file.text is not None:
        return file.text
    assert file.template is not None
    try:
        return (folder / file.template).read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot read the template {file.template!r}: {error}") from None


class ExecutableAdapter(Adapter):
    """A program that reads files and prints a table."""

    name = "executable"
    Settings = ExecutableSettings

    @classmethod
    def check(cls, settings: ExecutableSettings, context: AdapterContext) -> None:
        program_of(settings, context.folder)
        known = {"start", "end", "n_times", "times"}
        known |= {*context.state_names, *context.parameter_names}
        if settings.forcing is not None:
            known |= {"step", "n_forcing"}
        elif context.source_names:
            raise InputError(
                "the study has noise sources, and the program is not given them: add a "
                "[propagator.forcing] table with file and step"
            )
        for file in settings.inputs:
            check_template(template_of(file, context.folder), known, file.template or file.file)
        count = len(settings.output.columns)
        if count != len(context.state_names):
            raise InputError(
                f"output.columns names {count} columns for the {len(context.state_names)} state "
                "components; one each is needed, in the state's order"
            )
        for name in settings.depends:
            if not (context.folder / name).is_file():
                raise InputError(f"depends: there is no file {name!r} in {context.folder}")

    @classmethod
    def build(cls, settings: ExecutableSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        return ExecutablePropagator(settings, context)
