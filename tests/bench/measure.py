"""Shared by the benchmarks: times in turn, peak memory, growth exponents, rows."""

from __future__ import annotations

import time
import tracemalloc
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

Work = Callable[[], Any]


def times(*works: Work, repeats: int = 5) -> list[float]:
    """Best time of each work in seconds, the works taking turns."""
    best = [np.inf] * len(works)
    for _ in range(repeats):
        for k, work in enumerate(works):
            start = time.perf_counter()
            work()
            best[k] = min(best[k], time.perf_counter() - start)
    return best


def peak_megabytes(work: Work) -> float:
    """Most memory allocated at once while the work is done, beyond what was there before."""
    tracemalloc.start()
    try:
        work()
        return tracemalloc.get_traced_memory()[1] / 1e6
    finally:
        tracemalloc.stop()


def growth(sizes: Sequence[int], make: Callable[[int], Work], repeats: int = 5) -> float:
    """Exponent e of time ~ size^e, fitted over the sizes, which take turns."""
    seconds = times(*(make(size) for size in sizes), repeats=repeats)
    return float(np.polyfit(np.log(sizes), np.log(seconds), 1)[0])


def at_least(name: str, value: float, goal: float, unit: str = "times faster") -> dict[str, Any]:
    return _row(name, value, unit, f"at least {goal:g}", value >= goal)


def at_most(name: str, value: float, goal: float, unit: str = "") -> dict[str, Any]:
    return _row(name, value, unit, f"at most {goal:g}", value <= goal)


def stated(name: str, value: float, unit: str) -> dict[str, Any]:
    """A figure without a goal."""
    return _row(name, value, unit, "", None)


def _row(name: str, value: float, unit: str, goal: str, met: bool | None) -> dict[str, Any]:
    return {
        "name": name,
        "value": float(value),
        "unit": unit,
        "goal": goal,
        "met": None if met is None else bool(met),
    }
