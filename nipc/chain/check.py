"""Held-out direct runs against the expansions: how far ahead the answers can be trusted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray


@dataclass(frozen=True, eq=False)
class HeldOut:
    """Fresh members run directly and through the expansions with the same noise paths.

    direct, predicted (C, T, Q); spread (T, Q) is the ensemble's standard deviation.
    """

    times: FloatArray
    direct: FloatArray
    predicted: FloatArray
    spread: FloatArray

    @property
    def rms(self) -> FloatArray:
        """(T, Q) root-mean-square path error, in the quantity's unit; NaN without direct runs."""
        gap = self.direct - self.predicted
        known = np.isfinite(gap)
        count = known.sum(axis=0)
        total = np.where(known, gap, 0.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.asarray(np.sqrt(np.sum(total**2, axis=0) / count))

    @property
    def error(self) -> FloatArray:
        """(T, Q) path error over the spread; zero where both are within rounding of nothing."""
        size = np.nanmax(np.abs(self.direct), axis=0, initial=0.0)
        rms = self.rms
        tiny = rms <= 64.0 * np.finfo(float).eps * size
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(tiny, 0.0, rms / self.spread)

    def trust_horizon(self, tolerance: float) -> FloatArray:
        """(Q,) last output time up to which the path error keeps within the tolerance.

        NaN where it fails at the first output time already.
        """
        good = self.error <= tolerance
        kept = np.logical_and.accumulate(good, axis=0).sum(axis=0)
        return np.where(kept > 0, self.times[np.maximum(kept - 1, 0)], np.nan)
