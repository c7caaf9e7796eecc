"""f_1 ... f_{N-1} of Karhunen-Loeve, and the constant orthonormalised against them."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise.basis import NoiseBasis
from nipc.problem.noise.karhunen_loeve import KarhunenLoeve


class CompletedKarhunenLoeve(NoiseBasis):
    """Karhunen-Loeve whose last function makes the increment over the arc exact."""

    name = "completed"

    def __init__(self, terms: int) -> None:
        super().__init__(terms)
        self._cosines = KarhunenLoeve(terms - 1) if terms > 1 else None
        # overlap of the constant with each cosine, and what is left of it
        self._overlap = (
            np.empty(0) if self._cosines is None else self._cosines.integrals(np.ones(1))[:, 0]
        )
        self._rest = float(np.sqrt(1.0 - self._overlap @ self._overlap))

    def _complete(self, cosines: FloatArray, constant: FloatArray) -> FloatArray:
        return np.vstack([cosines, (constant - self._overlap @ cosines) / self._rest])

    def values(self, u: FloatArray) -> FloatArray:
        u = np.asarray(u, float)
        cosines = np.empty((0, u.size)) if self._cosines is None else self._cosines.values(u)
        return self._complete(cosines, np.ones(u.size))

    def integrals(self, u: FloatArray) -> FloatArray:
        u = np.asarray(u, float)
        sines = np.empty((0, u.size)) if self._cosines is None else self._cosines.integrals(u)
        return self._complete(sines, u)

    def path_retained(self) -> float:
        if self._cosines is None:
            return 2.0 / 3.0
        w, c = self._cosines.frequencies, self._overlap
        # the sine integrals are orthogonal; int u F_k = sqrt(2) sin(w) / w^3 = c_k / w^2
        last = (1.0 / 3.0 - np.sum(c**2 / w**2)) / self._rest**2
        return float(2.0 * (np.sum(w**-2.0) + last))
