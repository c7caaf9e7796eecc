"""The other end of `nipc.runs.processes`: a process that runs units until it is told to stop.

It dies with its master: the connection then ends, and with it the process and all that it started.
"""

from __future__ import annotations

import contextlib
import faulthandler
import os
import queue
import signal
import socket
import threading
import time
from multiprocessing.connection import Connection
from typing import Any

from nipc.runs.descendants import end_descendants
from nipc.runs.propagator import Batch
from nipc.runs.unit import Answer, call

TOGETHER = 0.02  # seconds for which quick answers are collected before they are sent
LATEST = 0.2  # seconds after which collected answers are sent whatever the worker is doing
_LOG_SIZE = 1 << 20  # bytes of the user's error output that may pile up
_MODELS = 8


class Outbox:
    """Answers on their way to the master; quick ones travel together."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._lock = threading.Lock()
        self._task = -1
        self._answers: list[Answer] = []
        self._sent = time.monotonic()

    def add(self, task: int, answer: Answer) -> None:
        with self._lock:
            self._task = task
            self._answers.append(answer)
            if time.monotonic() - self._sent > TOGETHER:
                self._flush()

    def end(self) -> None:
        """The task is finished."""
        with self._lock:
            if self._answers:
                self._flush()

    def tend(self) -> None:
        """Send what has waited for long; in a thread of its own."""
        while True:
            time.sleep(LATEST)
            with self._lock:
                if self._answers and time.monotonic() - self._sent > LATEST:
                    self._flush()

    def say(self, kind: str, text: str) -> None:
        with self._lock:
            self._connection.send((kind, text))

    def _flush(self) -> None:
        answers, self._answers = self._answers, []
        self._connection.send(("answers", self._task, answers))
        self._sent = time.monotonic()


def _receive(connection: Connection, inbox: queue.SimpleQueue[Any], out: Outbox) -> None:
    """Take messages in as they come, so that the master never waits for a busy worker."""
    while True:
        try:
            message = connection.recv()
        except (EOFError, OSError):
            _end()
        except Exception as error:
            out.say("broken", f"{type(error).__name__}: {error}")
        else:
            inbox.put(message)


def _end() -> None:
    """Leave at once, with every process that this one has started."""
    end_descendants(os.getpid())
    with contextlib.suppress(OSError):
        os.killpg(os.getpgid(0), signal.SIGKILL)
    os._exit(1)


def main(file: int) -> None:
    """Serve the master at the other end of this file descriptor."""
    os.set_inheritable(file, False)
    faulthandler.enable(all_threads=False)
    connection = Connection(file)
    out = Outbox(connection)
    inbox: queue.SimpleQueue[Any] = queue.SimpleQueue()
    out.say("ready", "")
    for target, arguments in ((_receive, (connection, inbox, out)), (out.tend, ())):
        threading.Thread(target=target, args=arguments, daemon=True).start()
    host = socket.gethostname()
    _, propagator, limit = inbox.get()
    out.say("set up", "")
    times: Any = None
    model: Any = None
    models: dict[bytes, Any] = {}
    while True:
        match inbox.get():
            case ("arc", times, model):
                # a model that is known brings along what it has computed
                model = models.setdefault(model.digest(), model)
                if len(models) > _MODELS:
                    models.pop(next(iter(models)))
            case ("units", task, units):
                for unit, states, coefficients, parameters in units:
                    part = Batch(states, times, model.realise(coefficients), parameters)
                    out.add(task, call(propagator, part, unit, limit, host))
                out.end()
                _trim_log()


def _trim_log() -> None:
    with contextlib.suppress(OSError):
        if os.fstat(2).st_size > _LOG_SIZE:
            os.ftruncate(2, 0)
