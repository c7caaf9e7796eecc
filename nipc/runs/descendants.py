"""Ends a process with all that it has started, also what was set apart in a session of its own."""

from __future__ import annotations

import contextlib
import os
import signal
from pathlib import Path


def descendants(pid: int) -> list[int]:
    """Processes started by `pid` and by those, as far as the system tells (Linux: /proc)."""
    children: dict[int, list[int]] = {}
    for folder in Path("/proc").glob("[0-9]*"):
        with contextlib.suppress(OSError, IndexError, ValueError):
            # the name, in brackets, may hold anything; the parent is the second word after it
            parent = int((folder / "stat").read_text().rpartition(")")[2].split()[1])
            children.setdefault(parent, []).append(int(folder.name))
    found, todo = [], [pid]
    while todo:
        started = children.get(todo.pop(), [])
        found += started
        todo += started
    return found


def end_descendants(pid: int) -> None:
    """Kill what `pid` has started; to be called while it is still there."""
    for child in descendants(pid):
        with contextlib.suppress(OSError):
            os.kill(child, signal.SIGKILL)
