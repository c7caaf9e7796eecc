"""What is missed between two looks: discrete monitoring overstates survival of rough motion."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.answers.boxes import Box
from nipc.arrays import FloatArray

SHIFT = 0.5825971579390107
"""-zeta(1/2) / sqrt(2 pi): Chernoff 1965; Broadie, Glasserman & Kou 1997."""


@dataclass(frozen=True)
class Roughness:
    """How increments grow with the step, E(q(t + s) - q(t))^2 ~ s^(2 exponent), a quantity each.

    exponent 0.5 is Brownian, 1 is smooth; `rate` is the increments' standard deviation per square
    root of time at the output step.
    """

    exponent: FloatArray
    rate: FloatArray

    @property
    def rough(self) -> np.ndarray:
        """Nearer to Brownian than to smooth, (Q,)."""
        return np.asarray(self.exponent < 0.75)


def roughness(values: FloatArray, times: FloatArray) -> Roughness:
    """From members (n, T, Q) at evenly spaced times: one step against two, the mean taken out."""
    step = float(np.median(np.diff(times)))
    one, two = values[:, 1:] - values[:, :-1], values[:, 2:] - values[:, :-2]
    single, double = (np.nanmean(np.nanvar(d, axis=0), axis=0) for d in (one, two))
    with np.errstate(invalid="ignore", divide="ignore"):
        exponent = 0.5 * np.log2(double / single)
    return Roughness(exponent, np.sqrt(single / step))


def continuous_box(box: Box, rate: FloatArray, step: float) -> Box:
    """The box whose ends seen every `step` are left as often as the given ones seen always.

    Each end moved inwards by 0.5826 rate sqrt(step); `rate` (Q,) in units per square root of time.
    For Brownian-like quantities, to the order of the step (Broadie, Glasserman & Kou 1997).
    """
    return box.narrowed([SHIFT * float(rate[c]) * np.sqrt(step) for c in box.columns])
