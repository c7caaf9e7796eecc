"""xi on an even grid of times, as a table for programs and libraries."""

from __future__ import annotations

from functools import lru_cache
from weakref import WeakKeyDictionary

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise import Forcing, NoiseModel

_Key = tuple[float, float, int]
# a worker meets the same model with every run of an arc
_KNOWN: WeakKeyDictionary[NoiseModel, dict[_Key, FloatArray]] = WeakKeyDictionary()
_MOST = 64  # grids that are kept of a model


@lru_cache(maxsize=_MOST)
def forcing_grid(start: float, end: float, step: float) -> FloatArray:
    """Times from start to end in equal steps of at most `step`, not to be written to."""
    count = max(1, int(np.ceil((end - start) / step - 1e-9)))
    grid = np.linspace(start, end, count + 1)
    grid.flags.writeable = False
    return grid


def grid_table(forcing: Forcing, grid: FloatArray) -> FloatArray:
    """forcing.table(grid) for an even grid, (n, T, J), as one product: Z @ shapes."""
    grids = _KNOWN.setdefault(forcing.model, {})
    key = (float(grid[0]), float(grid[-1]), grid.size)
    if key not in grids:
        if len(grids) >= _MOST:
            grids.clear()
        model, count = forcing.model, forcing.n_sources
        shapes = np.zeros((model.size, grid.size, count))
        for j, functions in enumerate(model.shapes):
            shapes[model.columns(j), :, j] = functions.values(grid)
        grids[key] = shapes.reshape(model.size, grid.size * count)
    flat = forcing.coefficients @ grids[key]
    return flat.reshape(len(forcing), grid.size, forcing.n_sources)
