"""What is told while runs go on: silent, lines, or bars."""

from __future__ import annotations

import math
import sys
import time
from dataclasses import replace
from typing import Protocol, TextIO

from rich.console import Console
from rich.progress import BarColumn, TextColumn
from rich.progress import Progress as RichProgress
from rich.table import Column

from nipc.runs.journey import ArcTold, Journey, Rate, duration


class Progress(Protocol):
    """Hears of a batch of runs. A run is counted once it is kept."""

    def start(self, label: str, total: int, reused: int) -> None:
        """A batch of `total` runs begins, of which `reused` are kept from before."""

    def advance(self, done: int, failed: int) -> None:
        """So many more runs are finished, and of them so many failed."""

    def finish(self) -> None:
        """The batch ended, for whatever reason."""

    def arc(self, told: ArcTold) -> None:
        """An arc of a chain is done, and what it is like."""


class Silent:
    """Says nothing."""

    def start(self, label: str, total: int, reused: int) -> None:
        pass

    def advance(self, done: int, failed: int) -> None:
        pass

    def finish(self) -> None:
        pass

    def arc(self, told: ArcTold) -> None:
        pass


class Lines:
    """Lines for the logs of batch queues: starts and ends, but of short batches only some.

    A start or an arc is told when nothing was told for `every` seconds, an end when its start was
    or when runs have failed.
    """

    def __init__(self, out: TextIO | None = None, every: float = 10.0) -> None:
        self._out = sys.stderr if out is None else out
        self._every = every
        self._last = -math.inf
        self._journey = Journey()

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

    def arc(self, told: ArcTold) -> None:
        self._journey.hear(told)
        if self._due():
            left = self._journey.seconds_left
            self._say(f"{told}" + (f", {duration(left)} left" if left else ""), told.place)

    def _due(self) -> bool:
        return time.monotonic() - self._last >= self._every

    def _say(self, text: str, label: str = "") -> None:
        self._last = time.monotonic()
        print(f"{label or self._label}: {text}", file=self._out, flush=True)


class Bar:
    """A bar for the batch, and above it one for the horizon where arcs are told."""

    def __init__(self, console: Console | None = None) -> None:
        self._console = Console(stderr=True) if console is None else console
        self._journey = Journey()

    def start(self, label: str, total: int, reused: int) -> None:
        self._rate, self._total = Rate(total - reused), total
        self._bar = RichProgress(
            TextColumn("{task.description}", markup=False), BarColumn(bar_width=12),
            TextColumn("{task.fields[told]}", markup=False, table_column=Column(no_wrap=True)),
            console=self._console, transient=True,
        )  # fmt: skip
        arc, left = self._journey.arc, self._journey.seconds_left
        if arc is not None:
            known = "" if left is None else f", {duration(left)} left"
            plain = replace(arc, note="")  # it stands above
            self._bar.add_task(
                arc.place, total=100, completed=round(100 * arc.share), told=f"{plain}{known}"
            )
            label = label.rpartition(", ")[2]  # the place is told by the horizon's bar
        self._task = self._bar.add_task(label, total=total, completed=reused, told=self._told())
        self._bar.start()

    def advance(self, done: int, failed: int) -> None:
        self._rate.advance(done, failed)
        self._bar.update(self._task, advance=done, told=self._told())

    def finish(self) -> None:
        self._bar.stop()

    def arc(self, told: ArcTold) -> None:
        self._journey.hear(told)
        if told.note:
            self._console.print(f"{told.place}: {told}", markup=False, highlight=False)

    def _told(self) -> str:
        rate = self._rate
        failed = f", {rate.failed} failed" if rate.failed else ""
        left = f", {duration(rate.left / rate.rate)} left" if rate.left and rate.rate > 0.0 else ""
        return f"{self._total - rate.left}/{self._total}, {rate.rate:.3g}/s{failed}{left}"


def usual() -> Progress:
    """For Python: a line in a notebook, silence elsewhere."""
    from nipc.runs.notebook import Notebook, in_notebook

    return Notebook() if in_notebook() else Silent()


def suited(out: TextIO | None = None) -> Progress:
    """A bar on a terminal, lines elsewhere."""
    stream = sys.stderr if out is None else out
    return Bar(Console(file=stream)) if stream.isatty() else Lines(stream)
