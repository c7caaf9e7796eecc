"""Answers: driver shares against the propagator's own, a sweep from one study, time and memory."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import answers_drivers
import answers_questions
from measure import at_least, at_most

RUNS = 40_000  # five times as many whole runs: errors of the reference up to 0.007


def rows() -> list[dict[str, Any]]:
    """One row a figure."""
    return [driver_shares(), *one_study_for_a_sweep(), *all_answers()]


def driver_shares() -> dict[str, Any]:
    """The slot watch over 28 days: its chain's shares against 200,000 runs of its dynamics."""
    reference = answers_drivers.direct(RUNS)
    with tempfile.TemporaryDirectory() as folder:
        data = answers_drivers.by_chain(Path(folder), RUNS)
    gap = answers_drivers.largest_gap(data, reference)
    return at_most("slot watch: largest error of a driver share", gap, 0.02)


def one_study_for_a_sweep() -> list[dict[str, Any]]:
    """Ten intensities of two sources on the geostationary slot of 28 days."""
    found = answers_questions.swept()
    what = "geostationary, 28 days, ten intensities of two sources"
    return [
        at_least(f"{what}: runs of ten studies over those of one", found.ratio, 10.0, "times"),
        at_most(f"{what}: largest gap of a standard deviation", found.gap, 0.01),
    ]


def all_answers() -> list[dict[str, Any]]:
    """What 100,000 members x 40 arcs x 3 quantities x 3 groups take: on one core, and of memory."""
    found = answers_questions.answered()
    what = f"{found.members[-1]:,} members x 40 arcs x 3 quantities x 3 groups"
    return [
        at_most(f"{what}: all answers", found.seconds[-1], 60.0, "s"),
        at_most(f"{what}: peak memory", found.gigabytes, 4.0, "GiB"),
        at_most("seconds of all answers ~ members^e: e", found.growth, 1.1),
    ]
