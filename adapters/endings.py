"""Physical endings: what is kept of a run that was lost on its way."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import PropagatorError


def until(rows: FloatArray, times: FloatArray, ended: float) -> FloatArray:
    """States (m, d) of one run that ended: rows (k, d) at times[:k], NaN after `ended`.

    PropagatorError when the end lies outside the arc or states before it are missing.
    """
    if not times[0] <= ended <= times[-1]:
        raise PropagatorError(
            f"the motion is said to have ended at t = {ended:g}, which is outside the run, "
            f"from {times[0]:g} to {times[-1]:g}"
        )
    alive = int(np.searchsorted(times, ended, side="right"))
    if rows.shape[0] < alive:
        raise PropagatorError(
            f"the motion ended at t = {ended:g}, and {alive} output times lie before it, but "
            f"{rows.shape[0]} states were given"
        )
    states = np.full((times.size, rows.shape[1]), np.nan)
    states[:alive] = rows[:alive]
    return states
