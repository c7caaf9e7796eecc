"""How far runs and arcs have come, and how long the rest may take."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

LOOKED_BACK = 8  # arcs by which the pace is told: degrees, and with them costs, change on the way


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


@dataclass(frozen=True)
class ArcTold:
    """An arc that is done, or at which the chain stops: its number from 1, and why it is so.

    It ends at `end` of a horizon from `first` to `last`, in `unit`; `error` is held out, over the
    spread.
    """

    number: int
    end: float
    first: float
    last: float
    unit: str
    degree: int
    runs: int
    error: float
    note: str = ""

    @property
    def share(self) -> float:
        """Of the horizon that is done."""
        return (self.end - self.first) / (self.last - self.first)

    @property
    def place(self) -> str:
        """`t = 6 of 28 day`."""
        return f"t = {self.end:.6g} of {self.last:.6g} {self.unit}".rstrip()

    def __str__(self) -> str:
        note = f", {self.note}" if self.note else ""
        return (
            f"arc {self.number}: degree {self.degree}, {self.runs} runs,"
            f" error {100.0 * self.error:.2g} %{note}"
        )


class Journey:
    """The arcs heard of so far; `arc` is the last, None before the first."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._marks: deque[tuple[float, float]] = deque(maxlen=LOOKED_BACK + 1)
        self.arc: ArcTold | None = None

    def hear(self, arc: ArcTold) -> None:
        """An arc is done. One that lies before the last begins the chain anew."""
        if self.arc is not None and arc.end <= self.arc.end:
            self._marks.clear()
        self.arc = arc
        self._marks.append((self._clock(), arc.share))

    @property
    def seconds_left(self) -> float | None:
        """At the pace of the last arcs; None while that is not known."""
        if len(self._marks) < 2:
            return None
        (began, share), (now, reached) = self._marks[0], self._marks[-1]
        return (1.0 - reached) * (now - began) / (reached - share) if now > began else None
