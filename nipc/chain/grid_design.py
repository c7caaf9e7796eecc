"""Sparse-grid nodes of an arc, in the whitened coordinates of a near-Gaussian ensemble.

x = m + sum_k y_k v_k with the directions v_k of the ensemble's covariance, y and the fresh noise on
a Gauss-Hermite grid. Where the whitened ensemble is not nearly Gaussian the grid would lie where no
member is; then, and with uncertain parameters, candidates come from the ensemble instead.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import stats

from nipc.arrays import FloatArray
from nipc.chain.horizon import Members
from nipc.expansion import sparse_grid
from nipc.expansion.sampled import Whitening

SKEWED, PEAKED = 0.5, 1.0
"""Skewness and excess kurtosis of a direction beyond which it is not nearly Gaussian."""
MOST = 20_000


class Grid(NamedTuple):
    """Members at the grid's nodes, and the nodes with their noise (n, c + K)."""

    members: Members
    candidates: FloatArray


def grid_of(pool: Members, noise: int, level: int) -> Grid | None:
    """The grid of a level for a pool and so many white coefficients; None when it does not fit."""
    import chaospy

    if pool.law.shape[1]:
        return None
    known = pool.correlated[pool.open]
    whitening = Whitening.of(known)
    white = whitening(known)
    if white.shape[1] and (
        np.max(np.abs(stats.skew(white))) > SKEWED or np.max(np.abs(stats.kurtosis(white))) > PEAKED
    ):
        return None
    directions = white.shape[1]
    size = directions + noise
    if size == 0 or _count(size, level) > MOST:
        return None
    nodes = sparse_grid([chaospy.Normal(0.0, 1.0)] * size, level).nodes
    # back from whitened coordinates: known = centre + white @ (its regression on white)
    back = white.T @ (known - whitening.centre) / known.shape[0]
    correlated = whitening.centre + nodes[:, :directions] @ back
    width = pool.values.shape[1]
    count = nodes.shape[0]
    members = Members(
        correlated[:, :width], correlated[:, width:], np.empty((count, 0)),
        np.tile(pool.parameters[:1], (count, 1)), np.zeros(count, dtype=bool),
        np.full(count, np.nan),
    )  # fmt: skip
    return Grid(members, np.hstack([members.correlated, nodes[:, directions:]]))


def _count(size: int, level: int) -> float:
    """About how many nodes a grid has: (2 d)^L / L!."""
    return float(2 * size) ** level / float(np.prod(np.arange(1, level + 1)))
