"""Answers: driver shares of a chain against the propagator's own."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import answers_drivers
from measure import at_most

RUNS = 40_000  # five times as many whole runs: errors of the reference up to 0.007


def rows() -> list[dict[str, Any]]:
    """One row a figure."""
    return [driver_shares()]


def driver_shares() -> dict[str, Any]:
    """The slot watch over 28 days: its chain's shares against 200,000 runs of its dynamics."""
    reference = answers_drivers.direct(RUNS)
    with tempfile.TemporaryDirectory() as folder:
        data = answers_drivers.by_chain(Path(folder), RUNS)
    gap = answers_drivers.largest_gap(data, reference)
    return at_most("slot watch: largest error of a driver share", gap, 0.02)
