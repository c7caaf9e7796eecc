"""Where the arcs stop, members go on by direct runs, as many as the budget has left."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import FloatArray, IntArray
from nipc.chain.horizon import Horizon, Members
from nipc.chain.ticks import TICKS

FEWEST = 20
"""Members below which a spread is not worth telling."""


@dataclass(frozen=True, eq=False)
class Continued:
    """The ensemble's first members beyond what the arcs reached.

    values (M, r, d) are chart values at the output times `rows` (r,), NaN where a run failed or
    had ended; `ended` (M,) is when, NaN where it did not.
    """

    values: FloatArray
    rows: IntArray
    ended: FloatArray


def continue_directly(horizon: Horizon, pool: Members, at: int) -> tuple[Continued | None, str]:
    """Run the pool's first members from tick `at` on, cell by cell, with their own noise.

    Returns them, or None when the budget leaves too few, and a sentence that says so.
    """
    study = horizon.study
    share = horizon.share(at, horizon.end)
    if study.budget is None:
        return None, (
            f"With a budget, members would go on by direct runs from there: 100 of them take "
            f"{100 * share:.0f} run-equivalents."
        )
    count = min(
        int((study.budget - horizon.cost) / share), pool.values.shape[0], study.ensemble.members
    )
    if count < FEWEST:
        return None, (
            f"The budget leaves {max(count, 0)} members to go on by direct runs; fewer than "
            f"{FEWEST} would say little, so nothing is said of later times."
        )
    members = pool.take(np.arange(count))
    ended = members.ended.copy()
    rows = np.flatnonzero(horizon.outputs > horizon.ticks[at])
    values = np.full((count, rows.size, pool.values.shape[1]), np.nan)
    alive = np.flatnonzero(np.isnan(ended))
    members = members.take(alive)
    for first, last in _stretches(at, horizon.end):
        model = horizon.model(first, last)
        times = horizon.arc_times(first, last)
        white = horizon.fresh(model, horizon.history, first, last, 0, count)[alive]
        label = f"t = {model.start:.6g} to {model.end:.6g}, direct ensemble"
        found, good, over = horizon.run_to_end(members, model, white, times, label, True)
        there = horizon.rows_between(first, last)
        inside = horizon.places(times, there)
        ended[alive] = np.fmin(ended[alive], over)
        alive, found = alive[good], found[good]
        values[np.ix_(alive, there - rows[0])] = found[:, inside]
        members = members.take(np.flatnonzero(good))
        carried = np.empty((count, members.carried.shape[1]))
        carried[alive] = members.carried
        carried = horizon.carry(carried, horizon.history, first, last, 0)[alive]
        members = replace(members, values=found[:, -1], carried=carried)
    words = (
        f"From there on {count} members of the ensemble went on by direct runs; what is said of "
        "later times rests on them alone."
    )
    return Continued(values, rows, ended), words


def _stretches(at: int, end: int) -> list[tuple[int, int]]:
    """Dyadic parts up to the next cell's edge, then cell by cell."""
    found = []
    while at < end:
        length = TICKS
        while at % length:
            length //= 2
        found.append((at, at + length))
        at += length
    return found
