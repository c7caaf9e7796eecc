"""Angles known modulo 2 pi, made continuous along time."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray

TURN = 2.0 * np.pi


def wrap(angle: FloatArray) -> FloatArray:
    """The angle plus the multiple of 2 pi that brings it to [-pi, pi]."""
    return np.asarray(angle - TURN * np.round(angle / TURN))


def circular_mean(angle: FloatArray) -> float:
    """arg sum exp(i angle) over the finite values (Mardia & Jupp 2000, section 2.2)."""
    finite = angle[np.isfinite(angle)]
    return float(np.arctan2(np.sin(finite).sum(), np.cos(finite).sum()))


def unwrap(angle: FloatArray, advance: FloatArray, reference: FloatArray | float) -> FloatArray:
    """angle + 2 pi k such that the first value is nearest `reference`, each step nearest `advance`.

    angle (n, m); advance (n, m - 1), the expected increments, so that a fast angle may turn more
    than once between two times; reference broadcasts to (n,). NaN stays NaN.
    """
    turns = np.empty_like(angle)
    turns[:, 0] = np.round((reference - angle[:, 0]) / TURN)
    turns[:, 1:] = np.round((advance - np.diff(angle, axis=1)) / TURN)
    return np.asarray(angle + TURN * np.cumsum(np.nan_to_num(turns, nan=0.0), axis=1))
