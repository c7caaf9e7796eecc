"""A continuous distribution as weighted points, fine enough to integrate polynomials on it."""

from __future__ import annotations

from typing import Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(32)
_DEEPEST = 60


def discretise(distribution: Any) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights (n,), summing to 1, of a one-dimensional chaospy distribution.

    Composite Gauss–Legendre rule of the density: panels are halved until the rule of each panel
    agrees with that of its halves to rounding, so that kinks and jumps are closed in on. InputError
    when the density does not integrate to 1 within 1e-8.
    """
    lower, upper = (float(np.ravel(v)[0]) for v in (distribution.lower, distribution.upper))
    edges = np.linspace(lower, upper, 17)
    left, right = edges[:-1], edges[1:]
    nodes: list[FloatArray] = []
    weights: list[FloatArray] = []
    for depth in range(_DEEPEST):
        middle = 0.5 * (left + right)
        _, whole = _rule(distribution, left, right)
        fine_nodes, fine = _rule(
            distribution, np.concatenate([left, middle]), np.concatenate([middle, right])
        )
        halves = fine.sum(axis=1).reshape(2, -1).sum(axis=0)
        settled = np.abs(halves - whole.sum(axis=1)) <= 1e-15
        if depth == _DEEPEST - 1:
            settled[:] = True
        keep = np.concatenate([settled, settled])
        nodes.append(fine_nodes[keep].ravel())
        weights.append(fine[keep].ravel())
        left, middle, right = left[~settled], middle[~settled], right[~settled]
        if left.size == 0:
            break
        left, right = np.concatenate([left, middle]), np.concatenate([middle, right])
    points, mass = np.concatenate(nodes), np.concatenate(weights)
    total = float(mass.sum())
    if abs(total - 1.0) > 1e-8:
        raise InputError(f"the density of {distribution} integrates to {total:.9g}, not to 1")
    order = np.argsort(points)
    return points[order], mass[order] / total


def _rule(distribution: Any, left: FloatArray, right: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Nodes and density-weighted weights (panels, 32) of the panels [left, right]."""
    half = 0.5 * (right - left)[:, None]
    nodes = 0.5 * (left + right)[:, None] + half * _NODES
    density = np.asarray(distribution.pdf(nodes.ravel()), dtype=np.float64).reshape(nodes.shape)
    return nodes, half * _WEIGHTS * density
