"""A program as it is: input files from templates, a forcing table, output tables."""

from __future__ import annotations

import json
import shutil
import tempfile
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.deck import Deck, InputFile, NumberFormat, Numbers, ScratchName, table_text
from nipc.adapters.endings import until
from nipc.adapters.forcing_grid import forcing_grid, grid_table, table_error
from nipc.adapters.legs import by_legs
from nipc.adapters.outputs import OutputTable, end_between
from nipc.adapters.program import call, failure, files_digest, program_of
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import NoiseModel
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class ForcingTable(BaseModel):
    """The noise as a table of t, xi_1 ... xi_J with a row every `step` of the clock's unit.

    In a batch the tables follow each other, or there is one a run with $run in the file's name.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    step: Positive
    header: bool = False
    format: NumberFormat | None = None


class ExecutableSettings(AdapterSettings):
    """The program, what it reads, what it writes.

    Templates may use $start, $end, $n_times, $times (a line each), $step and $n_forcing (of the
    forcing table), $run and $n_runs, and every state component and parameter by its name; numbers
    are printed by `format`, single ones by `formats`. `files` are copied into the run's folder,
    `links` linked. `stdin` and `stdout` are files of that folder. Printed times are time_offset +
    time_scale x the clock's. `lost_exit_code`: with it the program says that the motion ended for a
    physical reason; the rows that it wrote are kept. `batch`: one start of the program makes many
    runs. `keep_failed`: folders of failed runs are kept.
    """

    command: Annotated[tuple[str, ...], Field(min_length=1)]
    inputs: tuple[InputFile, ...] = ()
    forcing: ForcingTable | None = None
    output: Annotated[tuple[OutputTable, ...], Field(min_length=1)]
    format: NumberFormat = "%.17e"
    formats: dict[str, NumberFormat] = Field(default_factory=dict)
    fortran_exponent: bool = False
    files: tuple[str, ...] = ()
    links: tuple[str, ...] = ()
    stdin: ScratchName | None = None
    stdout: ScratchName | None = None
    environment: dict[str, str] = Field(default_factory=dict)
    time_offset: float = 0.0
    time_scale: Positive = 1.0
    time_limit: Positive | None = None
    lost_exit_code: Annotated[int, Field(ge=1, le=255)] | None = None
    batch: bool = False
    keep_failed: bool = False
    depends: tuple[str, ...] = ()

    @field_validator(
        "output", mode="before", json_schema_input_type=OutputTable | tuple[OutputTable, ...]
    )
    @classmethod
    def _one_or_many(cls, value: Any) -> Any:
        return (value,) if isinstance(value, dict) else value

    @model_validator(mode="after")
    def _consistent(self) -> ExecutableSettings:
        names = [f.file for f in self.inputs]
        names += [] if self.forcing is None else [self.forcing.file]
        names += [Path(f).name for f in (*self.files, *self.links)]
        twice = sorted({n for n in names if names.count(n) > 1})
        if twice:
            raise ValueError(f"two things would be written to {twice[0]!r}")
        if self.stdin is not None and self.stdin not in names:
            raise ValueError(f"stdin = {self.stdin!r} is none of the input files")
        if not self.batch and any("$run" in n for n in [*names, *(o.file for o in self.output)]):
            raise ValueError("$run in a file's name needs batch = true")
        if self.batch and any(o.rows == "final" for o in self.output):
            raise ValueError('rows = "final" starts a run again and again, which a batch cannot')
        if self.batch and self.lost_exit_code is not None:
            raise ValueError(
                "one exit code cannot tell which run of a batch was lost: use short_is_lost"
            )
        return self


class ExecutablePropagator(Propagator):
    """One run of the program a run or a batch, each in a scratch folder of its own."""

    def __init__(self, settings: ExecutableSettings, context: AdapterContext) -> None:
        self.settings, self.context = settings, context
        self.vectorised = settings.batch
        self.command = (
            str(program_of(settings.command[0], context.folder)), *settings.command[1:]
        )  # fmt: skip
        self.decks = tuple(Deck(f, context.folder) for f in settings.inputs)
        self.shown = Numbers(settings.format, settings.formats, settings.fortran_exponent)

    def propagate(self, batch: Batch) -> Trajectories:
        if any(o.rows == "final" for o in self.settings.output):
            return by_legs(self._once, batch)
        return self._once(batch)

    def _once(self, batch: Batch) -> Trajectories:
        self.context.scratch.mkdir(parents=True, exist_ok=True)
        folder = Path(tempfile.mkdtemp(prefix="run-", dir=self.context.scratch)).resolve()
        try:
            self._write(batch, folder)
            code = self._call(folder)
            found = self._read(batch, folder, code)
        except PropagatorError as error:
            if self.settings.keep_failed:
                raise PropagatorError(f"{error} (kept in {folder})") from None
            shutil.rmtree(folder, ignore_errors=True)
            raise
        except BaseException:
            shutil.rmtree(folder, ignore_errors=True)
            raise
        shutil.rmtree(folder, ignore_errors=True)
        return found

    # -- before ----------------------------------------------------------------------------------

    def _write(self, batch: Batch, folder: Path) -> None:
        settings, shown = self.settings, self.shown
        for name in settings.files:
            shutil.copy2(self.context.folder / name, folder / Path(name).name)
        for name in settings.links:
            (folder / Path(name).name).symlink_to((self.context.folder / name).resolve())
        times = self._printed(batch.times)
        shared = {
            "start": shown(times[0], "start"),
            "end": shown(times[-1], "end"),
            "n_times": str(times.size),
            "times": "\n".join(shown(t, "times") for t in times),
            "n_runs": str(len(batch)),
        }
        tables: FloatArray = np.empty((len(batch), 0, 0))
        grid: FloatArray = np.empty(0)
        if settings.forcing is not None:
            grid = forcing_grid(batch.times[0], batch.times[-1], settings.forcing.step)
            tables = grid_table(batch.forcing, grid)
            grid = self._printed(grid)
            shared |= {"step": shown(grid[1] - grid[0], "step"), "n_forcing": str(grid.size)}
            self._write_forcing(folder, grid, tables)
        words = [self._words(batch, i) for i in range(len(batch))]
        for deck in self.decks:
            rows = range(len(batch)) if "$run" in deck.file.file else [None]
            for i in rows:
                own = words if i is None else [words[i]]
                if deck.file.language == "jinja":
                    text = deck.fill_jinja(self._values(batch, times, grid, tables, i))
                else:
                    text = deck.fill(shared, own)
                name = deck.file.file if i is None else numbered(deck.file.file, i)
                self._target(folder, name).write_text(text, encoding="utf-8")

    def _printed(self, times: Any) -> Any:
        return self.settings.time_offset + self.settings.time_scale * times

    def _words(self, batch: Batch, row: int) -> dict[str, str]:
        names = (*self.context.state_names, *self.context.parameter_names)
        values = (*batch.states[row].tolist(), *batch.parameters[row].tolist())
        words = {n: self.shown(v, n) for n, v in zip(names, values, strict=True)}
        return words | {"run": str(row + 1)}

    def _values(
        self, batch: Batch, times: Any, grid: Any, tables: Any, row: int | None
    ) -> dict[str, Any]:
        """What a jinja template sees: numbers, lists, and number(x) to print one by `format`."""
        names = (*self.context.state_names, *self.context.parameter_names)
        runs = []
        for i in range(len(batch)) if row is None else [row]:
            values = (*batch.states[i].tolist(), *batch.parameters[i].tolist())
            table = [[t, *x] for t, x in zip(grid.tolist(), tables[i].tolist(), strict=True)]
            runs.append(dict(zip(names, values, strict=True)) | {"run": i + 1, "forcing": table})
        shared = {
            "start": float(times[0]), "end": float(times[-1]), "n_times": times.size,
            "times": times.tolist(), "n_runs": len(batch), "n_forcing": grid.size,
            "step": float(grid[1] - grid[0]) if grid.size else None, "number": self.shown,
            "runs": runs,
        }  # fmt: skip
        return shared | (runs[0] if len(runs) == 1 else {})

    def _write_forcing(self, folder: Path, grid: Any, tables: Any) -> None:
        forcing = self.settings.forcing
        assert forcing is not None
        shown = Numbers(forcing.format or self.settings.format, {}, self.shown.fortran)
        names = " ".join(self.context.source_names)
        head = f"# t {names}\n" if forcing.header else ""
        texts = [table_text(grid, table, shown) for table in tables]
        if "$run" in forcing.file:
            for i, text in enumerate(texts):
                self._target(folder, numbered(forcing.file, i)).write_text(head + text)
        else:
            self._target(folder, forcing.file).write_text(head + "".join(texts))

    def _target(self, folder: Path, name: str) -> Path:
        target = folder / name
        if not target.resolve().is_relative_to(folder):
            raise PropagatorError(f"{name!r} leads out of the run's scratch folder")
        target.parent.mkdir(parents=True, exist_ok=True)
        return target

    # -- the run ---------------------------------------------------------------------------------

    def _call(self, folder: Path) -> int:
        settings = self.settings
        code, words = call(
            self.command, folder, environment=settings.environment, limit=settings.time_limit,
            stdin=None if settings.stdin is None else self._target(folder, settings.stdin),
            stdout=None if settings.stdout is None else self._target(folder, settings.stdout),
        )  # fmt: skip
        if code not in (0, settings.lost_exit_code):
            raise failure(code, words)
        return code

    # -- after -----------------------------------------------------------------------------------

    def _read(self, batch: Batch, folder: Path, code: int) -> Trajectories:
        times, n = batch.times, len(batch)
        states = np.full((n, times.size, batch.states.shape[1]), np.nan)
        states[:, 0] = batch.states
        reach, told = np.full(n, times.size), np.full(n, np.inf)
        scale = (self.settings.time_offset, self.settings.time_scale)
        for output in self.settings.output:
            names = output.components or self.context.state_names
            places = [self.context.state_names.index(name) for name in names]
            lost = code != 0
            if "$run" in output.file:
                paths = [self._target(folder, numbered(output.file, i)) for i in range(n)]
                found = [output.read(path, times, 1, lost, scale)[0] for path in paths]
            else:
                found = output.read(self._target(folder, output.file), times, n, lost, scale)
            for i, rows in enumerate(found):
                states[i, rows.first : rows.reach, places] = rows.values.T
                reach[i] = min(int(reach[i]), rows.reach)
                told[i] = min(told[i], np.inf if rows.lost is None else rows.lost)
        ended = np.full(n, np.nan)
        for row in np.flatnonzero((reach < times.size) | (code != 0)):
            end = told[row] if np.isfinite(told[row]) else None
            ended[row] = end_between(times, int(reach[row]), end)
            states[row] = until(states[row], times, ended[row])
        return Trajectories(states, ended)

    def table_error(self, model: NoiseModel) -> float:
        """How far a table of this noise is off by its step: see `forcing_grid`."""
        forcing = self.settings.forcing
        return table_error(model, None if forcing is None else forcing.step)

    def fingerprint(self) -> str:
        folder, settings = self.context.folder, self.settings
        used = [Path(self.command[0])]
        used += [folder / f for f in (*settings.files, *settings.links, *settings.depends)]
        sources = json.dumps([deck.source for deck in self.decks])
        names = (self.context.state_names, self.context.parameter_names)
        return f"executable {settings.model_dump_json()} {names} {sources} {files_digest(used)}"


def numbered(name: str, row: int) -> str:
    """The file's name for one run, counted from 1."""
    return name.replace("$run", str(row + 1))


class ExecutableAdapter(Adapter):
    """A program that reads files and prints a table."""

    name = "executable"
    Settings = ExecutableSettings

    @classmethod
    def check(cls, settings: ExecutableSettings, context: AdapterContext) -> None:
        program_of(settings.command[0], context.folder)
        shared = {"start", "end", "n_times", "times", "n_runs"}
        own = {*context.state_names, *context.parameter_names, "run"}
        if settings.forcing is not None:
            shared |= {"step", "n_forcing"}
        elif context.source_names:
            raise InputError(
                "the study has noise sources, and the program is not given them: add a "
                "[propagator.forcing] table with file and step, or wrap it in the kicks adapter"
            )
        for file in settings.inputs:
            Deck(file, context.folder).check(shared, own, settings.batch)
        unknown = sorted(set(settings.formats) - shared - own)
        if unknown:
            raise InputError(f"formats: there is no {unknown[0]!r} to print")
        _check_outputs(settings, context)
        for key in ("files", "links", "depends"):
            for name in getattr(settings, key):
                if not (context.folder / name).is_file():
                    raise InputError(f"{key}: there is no file {name!r} in {context.folder}")

    @classmethod
    def build(cls, settings: ExecutableSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        return ExecutablePropagator(settings, context)


def _check_outputs(settings: ExecutableSettings, context: AdapterContext) -> None:
    read: list[str] = []
    for output in settings.output:
        names = output.components or context.state_names
        if output.count != len(names):
            what = "columns" if output.columns else "pattern"
            raise InputError(
                f"output.{what} for {output.file} reads {output.count} numbers, and there are "
                f"{len(names)} state components ({', '.join(names)}); one each is needed"
            )
        read += names
    for name in read:
        if name not in context.state_names:
            raise InputError(f"output.components: {name!r} is no state component")
        if read.count(name) > 1:
            raise InputError(f"output: {name!r} is read twice")
    missing = [n for n in context.state_names if n not in read]
    if missing:
        raise InputError(f"output: {', '.join(missing)} is read nowhere")
