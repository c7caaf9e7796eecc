"""A program of the user's: where it is, one call of it, and its end with all that it started."""

from __future__ import annotations

import contextlib
import hashlib
import os
import select
import shutil
import signal
import subprocess
import tempfile
from collections.abc import Mapping, Sequence
from functools import lru_cache
from pathlib import Path
from typing import Any

from nipc.errors import InputError, PropagatorError

TAIL = 400  # characters of standard error that are kept when a run fails


def program_of(name: str, folder: Path) -> Path:
    """The program's file: beside the study, absolute, or on the search path."""
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


def call(
    command: Sequence[str],
    folder: Path,
    *,
    environment: Mapping[str, str],
    stdin: Path | None = None,
    stdout: Path | None = None,
    limit: float | None = None,
) -> tuple[int, str]:
    """Run the program in the folder; its exit code and the tail of what it wrote as errors.

    PropagatorError when it cannot be started or takes longer than `limit` seconds. Nothing that it
    started is left behind, also when the caller is interrupted.
    """
    with contextlib.ExitStack() as stack:
        errors = stack.enter_context(tempfile.TemporaryFile(dir=folder))
        source: Any = stack.enter_context(stdin.open("rb")) if stdin else subprocess.DEVNULL
        sink: Any = stack.enter_context(stdout.open("wb")) if stdout else subprocess.DEVNULL
        process = start(command, folder, environment, source, sink, errors)
        try:
            if not _wait(process, limit):
                raise PropagatorError(f"the program did not end within {limit:g} s and was stopped")
        finally:
            end(process)
        return process.returncode, tail(errors)


def start(
    command: Sequence[str],
    folder: Path,
    environment: Mapping[str, str],
    stdin: Any,
    stdout: Any,
    stderr: Any,
) -> subprocess.Popen[bytes]:
    """Start the program.

    It stays in the process group of the worker that calls it, and ends with that group.
    """
    try:
        return subprocess.Popen(
            command, cwd=folder, stdin=stdin, stdout=stdout, stderr=stderr, bufsize=0,
            env={**os.environ, **environment},
        )  # fmt: skip
    except OSError as error:
        raise PropagatorError(f"cannot start {command[0]}: {error.strerror}") from None


def tail(errors: Any) -> str:
    """The last of an error output."""
    size = errors.seek(0, os.SEEK_END)
    errors.seek(max(0, size - 4 * TAIL))
    return errors.read().decode("utf-8", "replace").strip()[-TAIL:]


def failure(code: int, words: str) -> PropagatorError:
    """What is said of a program that ended with this code."""
    how = f"exit code {code}"
    if code < 0:
        with contextlib.suppress(ValueError):
            how = f"signal {signal.Signals(-code).name}"
    return PropagatorError(f"the program ended with {how}" + (f": {words}" if words else ""))


def _wait(process: subprocess.Popen[bytes], limit: float | None) -> bool:
    """Whether the program has ended within the limit."""
    if limit is None:
        process.wait()
        return True
    if hasattr(os, "pidfd_open"):  # tells at once, where wait() would look again and again
        handle = os.pidfd_open(process.pid)
        try:
            poll = select.poll()
            poll.register(handle, select.POLLIN)
            ended = bool(poll.poll(limit * 1000.0))
        finally:
            os.close(handle)
        if ended:
            process.wait()
        return ended
    try:
        process.wait(limit)
    except subprocess.TimeoutExpired:
        return False
    return True


def end(process: subprocess.Popen[bytes]) -> None:
    """Kill the program if it still runs, and the processes it has started."""
    if process.poll() is not None:
        return
    family = _descendants(process.pid)
    process.kill()
    for pid in family:
        with contextlib.suppress(ProcessLookupError, PermissionError):
            os.kill(pid, signal.SIGKILL)
    process.wait()


def _descendants(pid: int) -> list[int]:
    """Processes below this one, where the system tells (Linux)."""
    found: list[int] = []
    for thread in Path(f"/proc/{pid}/task").glob("*"):
        with contextlib.suppress(OSError):
            for child in (thread / "children").read_text().split():
                found += [int(child), *_descendants(int(child))]
    return found


def files_digest(paths: Sequence[Path]) -> str:
    """Hash of what the files hold."""
    digest = hashlib.sha256()
    for path in paths:
        try:
            stamp = path.stat()
            digest.update(_file_digest(path, stamp.st_mtime_ns, stamp.st_size))
        except OSError as error:
            raise InputError(f"cannot read {path}: {error.strerror}") from None
    return digest.hexdigest()


@lru_cache(maxsize=256)
def _file_digest(path: Path, modified: int, size: int) -> bytes:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").digest()
