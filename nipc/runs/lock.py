"""One writer per work folder, held by the operating system.

The lock ends with the process that holds it, however it ends, so a stale one cannot exist and no
clock is read.
"""

from __future__ import annotations

import fcntl
import os
import socket
from pathlib import Path

from nipc.errors import LedgerError


class WriterLock:
    """An exclusive lock on `path`, whose text says who holds it."""

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            self._file: int | None = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        except OSError as error:
            raise LedgerError(
                f"{path.parent}: cannot be written ({error.strerror}); the work folder must be a"
                " folder in which this user may make files"
            ) from None
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            holder = holder_of(path)
            os.close(self._file)
            self._file = None
            raise LedgerError(
                f"{path.parent}: in use by {holder}; wait until it has finished, or stop it,"
                " or give this study another work folder"
            ) from None
        text = f"process {os.getpid()} on {socket.gethostname()}\n"
        try:
            os.ftruncate(self._file, 0)
            os.pwrite(self._file, text.encode(), 0)
        except OSError as error:
            self.release()
            raise LedgerError(f"{path}: cannot be written ({error.strerror})") from None

    def release(self) -> None:
        """Let the next writer in; the file stays, since removing it would race with others."""
        if self._file is not None:
            os.close(self._file)
            self._file = None


def holder_of(path: Path) -> str:
    """Who wrote the lock's text last."""
    try:
        return path.read_text(errors="replace").strip() or "another process"
    except OSError:
        return "another process"


def is_held(path: Path) -> bool:
    """Whether some process writes to this work folder now."""
    try:
        file = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return False
    try:
        fcntl.flock(file, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except OSError:
        return True
    else:
        return False
    finally:
        os.close(file)
