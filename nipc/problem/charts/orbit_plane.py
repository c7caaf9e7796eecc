"""The plane of an orbit in space: half-angle tangents of its inclination, and coordinates in it."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


def normal(core: FloatArray) -> FloatArray:
    """Unit vector of r x v, (3, ...), from positions and velocities (6, ...)."""
    r, v = core[:3], core[3:]
    momentum = np.stack(
        [r[1] * v[2] - r[2] * v[1], r[2] * v[0] - r[0] * v[2], r[0] * v[1] - r[1] * v[0]]
    )
    return np.asarray(momentum / np.sqrt(np.sum(momentum**2, axis=0)))


def tangents(core: FloatArray) -> tuple[FloatArray, FloatArray]:
    """h = tan(i/2) cos(node) and k = tan(i/2) sin(node), singular at an inclination of 180 deg."""
    w = normal(core)
    return -w[1] / (1.0 + w[2]), w[0] / (1.0 + w[2])


def _axes(h: FloatArray, k: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Equinoctial unit vectors (3, ...) in the orbit's plane; the first is x turned onto it."""
    size = 1.0 + h**2 + k**2
    first = np.stack([1.0 - k**2 + h**2, 2.0 * h * k, -2.0 * k]) / size
    second = np.stack([2.0 * h * k, 1.0 + k**2 - h**2, 2.0 * h]) / size
    return first, second


def into_plane(core: FloatArray, h: FloatArray, k: FloatArray) -> FloatArray:
    """(x, y, vx, vy) along the equinoctial axes, (4, ...)."""
    first, second = _axes(h, k)
    r, v = core[:3], core[3:]
    return np.stack(
        [np.sum(vector * axis, axis=0) for vector in (r, v) for axis in (first, second)]
    )


def out_of_plane(
    plane: tuple[FloatArray, ...], h: FloatArray, k: FloatArray
) -> tuple[FloatArray, ...]:
    """Positions and velocities, six components, from (x, y, vx, vy) along the equinoctial axes."""
    first, second = _axes(h, k)
    x, y, vx, vy = plane
    return (*(x * first + y * second), *(vx * first + vy * second))


def node(core: FloatArray) -> FloatArray:
    """Angle of the ascending node from the first axis, in rad, from -pi to pi."""
    w = normal(core)
    return np.asarray(np.arctan2(w[0], -w[1]))


def inclination(core: FloatArray) -> FloatArray:
    """Angle between the orbit's normal and the third axis, in rad, from 0 to pi."""
    w = normal(core)
    return np.asarray(np.arctan2(np.hypot(w[0], w[1]), w[2]))
