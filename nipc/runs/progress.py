"""What is told while runs go on: silent, lines, or a bar."""

from __future__ import annotations

import math
import sys
import time
from typing import Protocol, TextIO

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
from rich.progress import Progress as RichProgress


class Progress(Protocol):
    """Hears of a batch of runs. A run is counted once it is kept."""

    def start(self, label: str, total: int, reused: int) -> None:
        """A batch of `total` runs begins, of which `reused` are kept from before."""

    def advance(self, done: int, failed: int) -> None:
        """So many more runs are finished, and of them so many failed."""

    def finish(self) -> None:
        """The batch ended, for whatever reason."""


class Silent:
    """Says nothing."""

    def start(self, label: str, total: int, reused: int) -> None:
        pass

    def advance(self, done: int, failed: int) -> None:
        pass

    def finish(self) -> None:
        pass


class Rate:
    """Runs per second and seconds left, by a clock that is never set back."""

    def __init__(self, total: int) -> None:
        self.left = total
        self.failed = 0
        self.done = 0
        self._began = time.monotonic()

    def advance(self, done: int, failed: int) -> None:
        self.left -= done
        self.done += done
        self.failed += failed

    @property
    def rate(self) -> float:
        elapsed = time.monotonic() - self._began
        return self.done / elapsed if elapsed > 0.0 else 0.0

    def __str__(self) -> str:
        parts = [f"{self.rate:.3g} runs/s"]
        if self.failed:
            parts.append(f"{self.failed} failed")
        if self.left and self.rate > 0.0:
            parts.append(f"{duration(self.left / self.rate)} left")
        return ", ".join(parts)


def duration(seconds: float) -> str:
    """Seconds in words a person reads at a glance."""
    if seconds < 1.0:
        return f"{1e3 * seconds:.{0 if seconds > 9.5e-3 else 1}f} ms"
    if seconds < 9.5:
        return f"{seconds:.2g} s"
    if seconds < 90.0:
        return f"{seconds:.0f} s"
    if seconds < 5400.0:
        return f"{seconds / 60.0:.0f} min"
    if seconds < 172800.0:
        return f"{seconds / 3600.0:.1f} h"
    return f"{seconds / 86400.0:.1f} d"


class Lines:
    """Lines for the logs of batch queues: starts and ends, but of short batches only some.

    A start is told when nothing was told for `every` seconds, an end when its start was or when
    runs have failed.
    """

    def __init__(self, out: TextIO | None = None, every: float = 10.0) -> None:
        self._out = sys.stderr if out is None else out
        self._every = every
        self._last = -math.inf

    def start(self, label: str, total: int, reused: int) -> None:
        self._label, self._total = label, total
        self._rate = Rate(total - reused)
        self._told = self._due()
        if self._told:
            kept = f", {reused} kept from before" if reused else ""
            self._say(f"{total} runs{kept}")

    def advance(self, done: int, failed: int) -> None:
        self._rate.advance(done, failed)
        if self._due():
            self._told = True
            self._say(f"{self._total - self._rate.left} of {self._total}, {self._rate}")

    def finish(self) -> None:
        if self._rate.failed or (self._told and self._rate.done):
            self._say(f"{self._total - self._rate.left} of {self._total} finished, {self._rate}")

    def _due(self) -> bool:
        return time.monotonic() - self._last >= self._every

    def _say(self, text: str) -> None:
        self._last = time.monotonic()
        print(f"{self._label}: {text}", file=self._out, flush=True)


class Bar:
    """A bar with count, rate, failures and time left."""

    def __init__(self, console: Console | None = None) -> None:
        self._console = Console(stderr=True) if console is None else console

    def start(self, label: str, total: int, reused: int) -> None:
        self._rate = Rate(total - reused)
        self._bar = RichProgress(
            TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(),
            TextColumn("{task.fields[rate]}"), TimeRemainingColumn(),
            console=self._console, transient=True,
        )  # fmt: skip
        self._task = self._bar.add_task(label, total=total, completed=reused, rate="")
        self._bar.start()

    def advance(self, done: int, failed: int) -> None:
        self._rate.advance(done, failed)
        text = f"{self._rate.rate:.3g}/s" + (
            f", {self._rate.failed} failed" if self._rate.failed else ""
        )
        self._bar.update(self._task, advance=done, rate=text)

    def finish(self) -> None:
        self._bar.stop()


def suited(out: TextIO | None = None) -> Progress:
    """A bar on a terminal, lines elsewhere."""
    stream = sys.stderr if out is None else out
    return Bar(Console(file=stream)) if stream.isatty() else Lines(stream)
