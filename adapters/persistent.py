"""A program that stays: one request a line on its standard input, one answer a line back.

Request (all on one line, separated by blanks):
    m d P J T  times (m)  state (d)  parameters (P)  then T rows of t xi_1 ... xi_J
Answer, one of:
    ok  followed by m x d numbers, state after state
    ended t  followed by the states at the times up to t: the motion ended for a physical reason
    error  followed by what is wrong with this run
"""

from __future__ import annotations

import contextlib
import os
import select
import subprocess
import tempfile
import time
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from pydantic import Field

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.endings import until
from nipc.adapters.forcing_grid import forcing_grid, grid_table, table_error
from nipc.adapters.program import end, failure, files_digest, program_of, start, tail
from nipc.adapters.reference import check_depends
from nipc.adapters.table_file import field_value
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import NoiseModel
from nipc.runs.propagator import AdapterContext, Batch, Propagator, Trajectories

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class PersistentSettings(AdapterSettings):
    """The program, started once a worker, and the step of its forcing table (see the module).

    `time_limit` in seconds a run: a program that takes longer is ended, and started again.
    """

    command: Annotated[tuple[str, ...], Field(min_length=1)]
    forcing_step: Positive | None = None
    environment: dict[str, str] = Field(default_factory=dict)
    time_limit: Positive | None = None
    depends: tuple[str, ...] = ()


class PersistentPropagator(Propagator):
    """Talks to one running program; starts it where there is none."""

    def __init__(self, settings: PersistentSettings, context: AdapterContext) -> None:
        self.settings, self.context = settings, context
        program = program_of(settings.command[0], context.folder)
        self.command = (str(program), *settings.command[1:])
        self._process: subprocess.Popen[bytes] | None = None
        self._errors: Any = None

    def __getstate__(self) -> dict[str, Any]:
        return self.__dict__ | {"_process": None, "_errors": None}

    def propagate(self, batch: Batch) -> Trajectories:
        answer = self._exchange(self._request(batch))
        try:
            return self._understood(answer, batch)
        except PropagatorError:
            if not answer.startswith(b"error"):
                self.close()  # who knows what else is on its way
            raise

    def close(self) -> None:
        """End the program."""
        if self._process is not None:
            end(self._process)
            pipes: tuple[Any, ...] = (self._process.stdin, self._process.stdout, self._errors)
            for pipe in pipes:
                with contextlib.suppress(OSError):
                    pipe.close()
            self._process = None

    def __del__(self) -> None:
        with contextlib.suppress(Exception):
            self.close()

    # -- words -----------------------------------------------------------------------------------

    def _request(self, batch: Batch) -> bytes:
        times, rows = batch.times, np.empty((0, 1))
        if self.settings.forcing_step is not None:
            grid = forcing_grid(times[0], times[-1], self.settings.forcing_step)
            rows = np.column_stack([grid, grid_table(batch.forcing, grid)[0]])
        counts = (
            times.size, batch.states.shape[1], batch.parameters.shape[1], rows.shape[1] - 1,
            rows.shape[0],
        )  # fmt: skip
        numbers = np.concatenate([times, batch.states[0], batch.parameters[0], rows.ravel()])
        words = [*map(str, counts), *map(repr, numbers.tolist())]
        return " ".join(words).encode("ascii") + b"\n"

    def _understood(self, answer: bytes, batch: Batch) -> Trajectories:
        words = answer.decode("utf-8", "replace").split()
        times, d = batch.times, batch.states.shape[1]
        kind = words[0] if words else ""
        if kind == "error":
            raise PropagatorError(" ".join(words[1:]) or "the program says error, and not why")
        if kind == "ok":
            states = _numbers(words[1:], 1)
            if states.size != times.size * d:
                raise PropagatorError(
                    f"the program answered {states.size} numbers; {times.size} times x {d} state "
                    f"components = {times.size * d} are expected"
                )
            return Trajectories.complete(states.reshape(1, times.size, d))
        if kind == "ended" and len(words) > 1:
            ended = field_value(words[1], "answer, word 2")
            states = _numbers(words[2:], 2)
            if states.size % d:
                raise PropagatorError(
                    f"the program answered {states.size} numbers, no whole states"
                )
            rows = until(states.reshape(-1, d), times, ended)
            return Trajectories(rows[None], np.array([ended]))
        shown = " ".join(words)[:60]
        raise PropagatorError(
            f"the program answered {shown!r}; its line must begin with ok, ended or error"
        )

    # -- the line --------------------------------------------------------------------------------

    def _exchange(self, request: bytes) -> bytes:
        limit = self.settings.time_limit
        until_ = None if limit is None else time.monotonic() + limit
        process = self._process
        if process is None or process.poll() is not None:
            process = self._start()
        assert process.stdin is not None
        assert process.stdout is not None
        try:
            return _talk(process.stdin.fileno(), process.stdout.fileno(), request, until_)
        except TimeoutError:
            self.close()
            raise PropagatorError(
                f"the program did not answer within {limit:g} s and was stopped"
            ) from None
        except (EOFError, BrokenPipeError):
            code = process.wait()
            words = tail(self._errors)
            self.close()
            if code == 0:
                raise PropagatorError(
                    "the program ended instead of answering: it must go on to the next line"
                    + (f": {words}" if words else "")
                ) from None
            raise failure(code, words) from None
        except BaseException:
            self.close()  # an answer that nobody waited for must not be taken for the next
            raise

    def _start(self) -> subprocess.Popen[bytes]:
        self.close()
        self._errors = tempfile.TemporaryFile()  # noqa: SIM115 - lives as long as the program
        self._process = start(
            self.command, self.context.folder, self.settings.environment,
            subprocess.PIPE, subprocess.PIPE, self._errors,
        )  # fmt: skip
        assert self._process.stdin is not None
        os.set_blocking(self._process.stdin.fileno(), False)
        return self._process

    def table_error(self, model: NoiseModel) -> float:
        """How far a table of this noise is off by its step: see `forcing_grid`."""
        return table_error(model, self.settings.forcing_step)

    def fingerprint(self) -> str:
        files = [Path(self.command[0])]
        files += [self.context.folder / name for name in self.settings.depends]
        return f"persistent {self.settings.model_dump_json()} {files_digest(files)}"


def _talk(there: int, back: int, request: bytes, until_: float | None) -> bytes:
    """Send the request and read one line, both as far as the other side keeps up."""
    poll = select.poll()
    poll.register(back, select.POLLIN)
    left, heard = memoryview(request), b""
    if left:
        poll.register(there, select.POLLOUT)
    while True:
        rest = None if until_ is None else max(0.0, (until_ - time.monotonic()) * 1000.0)
        ready = dict(poll.poll(rest))
        if not ready:
            raise TimeoutError
        if there in ready:
            if ready[there] & (select.POLLERR | select.POLLHUP):
                raise BrokenPipeError
            left = left[os.write(there, left) :]
            if not left:
                poll.unregister(there)
        if back in ready:
            piece = os.read(back, 1 << 20)
            if not piece:
                raise EOFError
            heard += piece
            if b"\n" in piece:
                line, rest_ = heard.split(b"\n", 1)
                if left or rest_:
                    raise PropagatorError(
                        "the program wrote more than one line for one request: nothing but the "
                        "answer may go to its standard output"
                    )
                return line


def _numbers(words: list[str], before: int) -> FloatArray:
    try:
        return np.array(words, dtype=float)  # the common case, in one go
    except ValueError:
        first = before + 1
        values = [field_value(w, f"answer, word {k}") for k, w in enumerate(words, start=first)]
        return np.array(values)


class PersistentAdapter(Adapter):
    """A program that answers line by line."""

    name = "persistent"
    Settings = PersistentSettings

    @classmethod
    def check(cls, settings: PersistentSettings, context: AdapterContext) -> None:
        program_of(settings.command[0], context.folder)
        check_depends(context.folder, settings.depends)
        if context.source_names and settings.forcing_step is None:
            raise InputError(
                "the study has noise sources, and the program is not given them: give "
                "forcing_step, or wrap it in the kicks adapter"
            )

    @classmethod
    def build(cls, settings: PersistentSettings, context: AdapterContext) -> Propagator:
        cls.check(settings, context)
        return PersistentPropagator(settings, context)
