"""f_1 ... f_N orthonormal on [0, 1]: what a white noise is expanded on.

On an arc [a, a + h] the basis is phi_k(t) = f_k((t - a) / h) / sqrt(h); then Z_k = int phi_k dW are
independent N(0, 1) and dW/dt = sum_k Z_k phi_k(t). A basis here knows its values and their running
integrals on the unit interval; everything about an arc follows by scaling.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import ClassVar

import numpy as np

from nipc.arrays import FloatArray


class NoiseBasis(ABC):
    """N orthonormal functions on [0, 1].

    A new basis is a file of its own beside `legendre.py`, entered in `nipc.problem.noise.BASES`.
    """

    name: ClassVar[str]

    def __init__(self, terms: int) -> None:
        if terms < 1:
            raise ValueError(f"a noise basis needs at least one term, not {terms}")
        self.terms = terms

    @abstractmethod
    def values(self, u: FloatArray) -> FloatArray:
        """f_k(u): u of shape (m,) in [0, 1] gives (terms, m)."""

    @abstractmethod
    def integrals(self, u: FloatArray) -> FloatArray:
        """F_k(u) = int_0^u f_k: u of shape (m,) gives (terms, m)."""

    @abstractmethod
    def path_retained(self) -> float:
        """Share of int_0^1 E W(u)^2 du = 1/2 that N terms keep, in closed form."""

    def end_retained(self) -> float:
        """Share of E W(1)^2 = 1 that N terms keep: sum_k F_k(1)^2."""
        return float(np.sum(self.integrals(np.ones(1)) ** 2))

    def response_retained(self, phase: float) -> float:
        """Share of the variance of v = int cos(phase (1 - u)) dW(u) that N terms keep.

        This is the velocity, at the end of an arc, of an oscillator that turns through `phase`
        radians during the arc: the plainest stand-in for a propagator's response.
        """
        nodes, weights = np.polynomial.legendre.leggauss(64 + 4 * self.terms + int(2 * phase))
        u = 0.5 * (nodes + 1.0)
        response = np.cos(phase * (1.0 - u))
        inner = self.values(u) @ (0.5 * weights * response)
        return float(inner @ inner / np.sum(0.5 * weights * response**2))

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.terms})"
