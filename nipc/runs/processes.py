"""Worker processes, each watched by itself: one that dies or hangs costs its own run and no other.

A pool that breaks as a whole when one of its processes dies could not tell whose fault it was, nor
end a single run; hence each worker has its own connection, and the master knows what it is at.
"""

from __future__ import annotations

import contextlib
import fcntl
import itertools
import json
import os
import signal
import socket
import subprocess
import sys
import tempfile
import time
from collections import deque
from collections.abc import Iterator
from multiprocessing.connection import Connection, wait
from pathlib import Path

import cloudpickle

from nipc.errors import RunsError
from nipc.runs.crew import Crew, Work
from nipc.runs.descendants import end_descendants
from nipc.runs.propagator import Propagator
from nipc.runs.unit import Answer, Problem, Unit, time_limit_problem

_CHUNK_SECONDS = 0.15  # work handed out at once, so that messages cost nothing beside it
_CHUNK_UNITS = 256
_POLL = 0.2
_START_SECONDS = 120.0
_TAIL = 1 << 14  # bytes of its error output that are looked at when a worker died
_THREADS = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS", "NUMEXPR_NUM_THREADS", "NUMBA_NUM_THREADS",
)  # fmt: skip
_ENTRY = (
    "import json, sys; sys.path[:] = json.loads(sys.argv[2]);"
    "from nipc.runs.worker import main; main(int(sys.argv[1]))"
)


class Worker:
    """One process and what it has been given."""

    def __init__(self, setup: bytes, folder: Path | None) -> None:
        ours, theirs = socket.socketpair()
        self._log = tempfile.TemporaryFile(dir=folder, buffering=0)  # noqa: SIM115 - see `end`
        fcntl.fcntl(self._log, fcntl.F_SETFL, os.O_APPEND)
        with theirs:
            self.process = subprocess.Popen(
                [sys.executable, "-c", _ENTRY, str(theirs.fileno()), json.dumps(sys.path)],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.DEVNULL,
                stderr=self._log,
                pass_fds=(theirs.fileno(),),
                start_new_session=True,  # the terminal's Ctrl-C is the master's to answer
                env=os.environ | dict.fromkeys(_THREADS, "1"),
            )
        self.connection = Connection(ours.detach())
        self.tasks: deque[tuple[int, dict[bytes, Unit]]] = deque()
        self.ready = False
        self.heard = time.monotonic()
        self.arc: Work | None = None
        with contextlib.suppress(OSError):  # a worker that died at once is found by its silence
            self.connection.send_bytes(setup)

    def give(self, number: int, units: list[Unit], work: Work) -> None:
        """Hand over a task."""
        if not self.tasks:
            self.heard = time.monotonic()
        self.tasks.append((number, {unit.rows.tobytes(): unit for unit in units}))
        batch = work.batch
        with contextlib.suppress(OSError):
            if self.arc is None or self.arc.batch is not batch:
                shared = ("arc", batch.times, batch.forcing.model)
                self.connection.send_bytes(cloudpickle.dumps(shared))
                self.arc = work
            parts = [
                (u, batch.states[u.rows], batch.forcing.coefficients[u.rows],
                 batch.parameters[u.rows])
                for u in units
            ]  # fmt: skip
            self.connection.send(("units", number, parts))

    def take(self, task: int, answers: list[Answer]) -> list[Answer]:
        """Strike answered units off the task they belong to."""
        self.heard = time.monotonic()
        number, units = self.tasks[0]
        assert number == task
        for answer in answers:
            del units[answer.unit.rows.tobytes()]
        if not units:
            self.tasks.popleft()
        return answers

    def overdue(self, limit: float | None) -> bool:
        """Whether the unit at work has had its time and more, and was not ended from inside."""
        silent = time.monotonic() - self.heard
        if not self.ready:
            return silent > _START_SECONDS
        if limit is None or not self.tasks or not self.tasks[0][1]:
            return False
        longest = max(len(unit) for unit in self.tasks[0][1].values())
        return silent > limit * longest + max(2.0, 0.1 * limit)

    def end(self) -> str:
        """Kill the process and what it started; how it had ended, in words."""
        code = self.process.poll()
        if code is None:
            with contextlib.suppress(subprocess.TimeoutExpired):
                code = self.process.wait(0.2)  # its connection may end a moment before it does
        if code is None:
            end_descendants(self.process.pid)
        with contextlib.suppress(OSError):
            os.killpg(self.process.pid, signal.SIGKILL)
        self.process.wait()
        self.connection.close()
        text = _ending(code)
        with contextlib.suppress(OSError):
            log = self._log.fileno()
            tail = os.pread(log, _TAIL, max(0, os.fstat(log).st_size - _TAIL))
            words = _last_words(tail.decode(errors="replace"))
            text += f": {words}" if words else ""
        self._log.close()
        return text


def _last_words(log: str) -> str:
    """Where a fatal signal struck, if the interpreter could say so, or else the last lines."""
    _, found, stack = log.rpartition("(most recent call first):\n")
    if found:
        return stack.split("\n", 1)[0].strip()
    lines = [line.strip() for line in log.splitlines() if line.strip()]
    return " | ".join(lines[-3:])[:300]


def _ending(code: int | None) -> str:
    if code is None:
        return "its process was ended"
    if code < 0:
        with contextlib.suppress(ValueError):
            return f"its process was killed by {signal.Signals(-code).name}"
    return f"its process left with exit code {code}"


class ProcessCrew(Crew):
    """`n_jobs` worker processes on this machine; what they print as errors waits in `folder`."""

    def __init__(
        self, propagator: Propagator, limit: float | None, n_jobs: int, folder: Path | None = None
    ) -> None:
        super().__init__(propagator, limit)
        self.n_jobs = n_jobs
        self.folder = folder
        self._setup = cloudpickle.dumps(("propagator", propagator, limit))
        self._workers: list[Worker] = []
        self._numbers = itertools.count()
        self._seconds = 0.0  # of a unit, lately
        self._stillborn = 0

    def answers(self, work: Work) -> Iterator[Answer | None]:
        todo = deque(work.units)
        left = len(todo)
        self._drop_idle_dead()
        while left:
            self._hand_out(todo, work)
            came = False
            for answer in self._collect(todo):
                came = True
                left -= 1
                yield answer
            if not came:
                yield None

    # -- giving ----------------------------------------------------------------------------------

    def _hand_out(self, todo: deque[Unit], work: Work) -> None:
        busy = sum(1 for worker in self._workers if worker.tasks)
        while len(self._workers) < min(self.n_jobs, busy + len(todo)):
            self._workers.append(Worker(self._setup, self.folder))
        depth = 1 if work.alone else 2  # one task to work at and one to go on with
        for level in range(depth):
            for worker in self._workers:
                if todo and len(worker.tasks) <= level:
                    size = 1 if work.alone else self._chunk(len(todo))
                    units = [todo.popleft() for _ in range(size)]
                    worker.give(next(self._numbers), units, work)

    def _chunk(self, left: int) -> int:
        if not self._seconds:
            return 1
        fair = -(-left // (3 * self.n_jobs))
        return max(1, min(int(_CHUNK_SECONDS / self._seconds), fair, left, _CHUNK_UNITS))

    # -- taking ----------------------------------------------------------------------------------

    def _collect(self, todo: deque[Unit]) -> Iterator[Answer]:
        ready = wait([worker.connection for worker in self._workers], _POLL)
        for worker in list(self._workers):
            dead = worker.connection not in ready and worker.process.poll() is not None
            if worker.connection in ready or dead:
                try:
                    while worker.connection.poll():
                        yield from self._heard(worker, worker.connection.recv())
                    if not dead:
                        continue
                except (EOFError, OSError):
                    pass
                yield from self._bury(worker, todo, Problem("crash", ""))
            elif worker.overdue(self.limit):
                yield from self._bury(worker, todo, time_limit_problem(self.limit))

    def _heard(self, worker: Worker, message: tuple[object, ...]) -> list[Answer]:
        match message:
            case ("answers", int(task), list(answers)):
                for answer in answers:
                    spent = answer.seconds * len(answer.unit)
                    self._seconds = max(1e-7, 0.8 * self._seconds + 0.2 * spent)
                return worker.take(task, answers)
            case ("broken", text):
                raise RunsError(f"the propagator cannot be set up in a worker process: {text}")
            case _:
                worker.heard = time.monotonic()
                worker.ready |= message[0] == "set up"
                self._stillborn = 0
                return []

    def _bury(self, worker: Worker, todo: deque[Unit], cause: Problem) -> Iterator[Answer]:
        """A worker is gone or must go: its present task answers for it, the rest is given back."""
        seconds = time.monotonic() - worker.heard
        how = worker.end()
        self._workers.remove(worker)
        if not worker.ready:
            self._stillborn += 1
            if self._stillborn > 2:
                raise RunsError(f"worker processes do not start: {how}")
            guilty: list[Unit] = []
            innocent = [unit for _, units in worker.tasks for unit in units.values()]
        else:
            waiting = [list(units.values()) for _, units in worker.tasks]
            guilty = waiting[0] if waiting else []
            innocent = [unit for units in waiting[1:] for unit in units]
        todo.extendleft(reversed(innocent))
        problem = cause if cause.reason else Problem(cause.kind, how)
        if len(guilty) > 1:
            problem = Problem("suspect", problem.reason)
        for unit in guilty:
            yield Answer.failure(unit, problem, seconds, socket.gethostname())

    # -- ends ------------------------------------------------------------------------------------

    def _drop_idle_dead(self) -> None:
        """Forget workers that were killed between two batches, and tasks nobody waits for."""
        for worker in list(self._workers):
            if worker.tasks or worker.process.poll() is not None:
                worker.end()
                self._workers.remove(worker)

    def stop(self) -> None:
        self.close()

    def close(self) -> None:
        while self._workers:
            self._workers.pop().end()
