"""Members dealt in turn to B batches: whatever is summed per batch tells its own uncertainty."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


def batch_sums(values: FloatArray, batches: int, first: int) -> FloatArray:
    """Sums over members: (n, ...) to (B, ...), member `first + i` in batch (first + i) % B."""
    n = values.shape[0]
    full = n // batches * batches
    sums = values[:full].reshape(-1, batches, *values.shape[1:]).sum(axis=0)
    sums[: n - full] += values[full:]
    return np.asarray(np.roll(sums, first % batches, axis=0))


def batch_products(left: FloatArray, right: FloatArray, batches: int, first: int) -> FloatArray:
    """`batch_sums(left * right)`, without the product ever standing in memory."""
    n, *rest = left.shape
    full = n // batches * batches
    shape = (-1, batches, int(np.prod(rest)))
    sums = np.einsum("mbk,mbk->bk", left[:full].reshape(shape), right[:full].reshape(shape))
    sums = sums.reshape(batches, *rest)
    sums[: n - full] += left[full:] * right[full:]
    return np.asarray(np.roll(sums, first % batches, axis=0))


def leave_one_out(sums: FloatArray) -> FloatArray:
    """Sums over all batches but one: (B, ...) to (B, ...)."""
    return np.asarray(sums.sum(axis=0) - sums)


def jackknife_error(estimates: FloatArray) -> FloatArray:
    """Standard error of an estimate from its B values without one batch (Efron & Stein 1981)."""
    batches = estimates.shape[0]
    away = estimates - estimates.mean(axis=0)
    return np.asarray(np.sqrt((batches - 1.0) / batches * np.sum(away**2, axis=0)))


def centre_of(values: FloatArray) -> FloatArray:
    """Mean over the members present, (n, ...) to (...), from which distances are then summed."""
    present = np.isfinite(values)
    total = np.where(present, values, 0.0).sum(axis=0)
    return np.asarray(total / np.maximum(present.sum(axis=0), 1))
