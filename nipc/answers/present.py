"""Mean, spread and size over the members that are there; NaN where none is, without a warning."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


def mean(values: FloatArray) -> FloatArray:
    """(n, ...) to (...)."""
    known = np.isfinite(values)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(known, values, 0.0).sum(axis=0) / known.sum(axis=0))


def std(values: FloatArray) -> FloatArray:
    """(n, ...) to (...), about the mean of those that are there."""
    return size(values - mean(values))


def size(values: FloatArray) -> FloatArray:
    """Root mean square, (n, ...) to (...)."""
    return np.asarray(np.sqrt(mean(values**2)))


def largest(values: FloatArray) -> FloatArray:
    """Largest magnitude, (n, ...) to (...); zero where none is there."""
    return np.asarray(np.max(np.where(np.isfinite(values), np.abs(values), 0.0), axis=0))
