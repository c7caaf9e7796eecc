"""xi on an even grid of times, as a table for programs and libraries."""

from __future__ import annotations

from functools import lru_cache
from itertools import pairwise
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


def table_error(model: NoiseModel, step: float | None) -> float:
    """Mean square error of the noise's integral by straight lines between the rows, as a share.

    Over each half of the arc, beside that integral's variance, the worst source; 0 without a table.
    The error of a term grows with its slope at the ends, as h^2/12 of it (Euler and Maclaurin).
    """
    if step is None or not model.sources:
        return 0.0
    grid = forcing_grid(model.start, model.end, step)
    cuts = sorted({0, grid.size // 2, grid.size - 1})
    germs = model.realise(np.eye(model.size))
    table, exact = grid_table(germs, grid), germs.increments(grid[cuts])
    read = np.stack(
        [np.trapezoid(table[:, a : b + 1], grid[a : b + 1], axis=1) for a, b in pairwise(cuts)],
        axis=1,
    )
    wrong, right = (np.sum(each**2, axis=(0, 1)) for each in (read - exact, exact))
    return float((wrong / right).max())
