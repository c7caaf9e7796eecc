"""f_k(u) = sqrt(2k + 1) P_k(2u - 1), k = 0 ... N - 1."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise.basis import NoiseBasis


class Legendre(NoiseBasis):
    """Legendre polynomials: spectrally accurate for smooth responses, exact at the end."""

    name = "legendre"

    def _polynomials(self, u: FloatArray, count: int) -> FloatArray:
        x = 2.0 * u - 1.0
        p = np.empty((count, x.size))
        p[0] = 1.0
        if count > 1:
            p[1] = x
        for k in range(1, count - 1):
            p[k + 1] = ((2 * k + 1) * x * p[k] - k * p[k - 1]) / (k + 1)
        return p

    def values(self, u: FloatArray) -> FloatArray:
        scale = np.sqrt(2.0 * np.arange(self.terms) + 1.0)
        return scale[:, None] * self._polynomials(np.asarray(u, float), self.terms)

    def integrals(self, u: FloatArray) -> FloatArray:
        # int_{-1}^x P_k = (P_{k+1} - P_{k-1}) / (2k + 1); Abramowitz & Stegun 8.14, DLMF 18.17
        u = np.asarray(u, float)
        p = self._polynomials(u, self.terms + 1)
        result = np.empty((self.terms, u.size))
        result[0] = u
        for k in range(1, self.terms):
            result[k] = 0.5 * (p[k + 1] - p[k - 1]) / np.sqrt(2.0 * k + 1.0)
        return result

    def path_retained(self) -> float:
        k = np.arange(1, self.terms)
        squares = (1.0 / (2 * k + 3) + 1.0 / (2 * k - 1)) / (4.0 * (2 * k + 1))
        return float(2.0 * (1.0 / 3.0 + np.sum(squares)))
