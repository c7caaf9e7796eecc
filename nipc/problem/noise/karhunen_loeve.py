"""f_k(u) = sqrt(2) cos((k - 1/2) pi u), k = 1 ... N."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise.basis import NoiseBasis


class KarhunenLoeve(NoiseBasis):
    """The Wiener process's own expansion: best for the path, but every f_k vanishes at u = 1.

    So the end value loses about 2 / (pi^2 N) of its variance, a bias in every diffusion figure.
    """

    name = "karhunen-loeve"

    @property
    def frequencies(self) -> FloatArray:
        """(k - 1/2) pi; their inverse squares are the Wiener process's eigenvalues."""
        return (np.arange(1, self.terms + 1) - 0.5) * np.pi

    def values(self, u: FloatArray) -> FloatArray:
        return np.sqrt(2.0) * np.cos(np.outer(self.frequencies, u))

    def integrals(self, u: FloatArray) -> FloatArray:
        w = self.frequencies
        return np.sqrt(2.0) * np.sin(np.outer(w, u)) / w[:, None]

    def path_retained(self) -> float:
        return float(2.0 * np.sum(self.frequencies**-2.0))
