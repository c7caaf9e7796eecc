"""One scalar random process that forces the motion."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise.basis import NoiseBasis


@dataclass(frozen=True)
class Source:
    """A noise source.

    White: xi = intensity x dW/dt, so that a velocity driven by it has variance intensity^2 t.
    Gauss-Markov: dxi = -xi/tau dt + intensity sqrt(2/tau) dW, stationary with standard deviation
    `intensity` and correlation time `time_constant` (Uhlenbeck & Ornstein 1930).
    """

    name: str
    unit: str
    intensity: float
    kind: Literal["white", "gauss-markov"] = "white"
    time_constant: float | None = None

    @property
    def carried(self) -> int:
        """How many values of the source are carried from arc to arc: 1 for Gauss-Markov."""
        return int(self.kind == "gauss-markov")

    def shapes(self, basis: NoiseBasis, start: float, end: float) -> Shapes:
        """The functions of time that multiply the source's germ variables on an arc."""
        if self.kind == "white":
            return WhiteShapes(basis, start, end, self.intensity)
        assert self.time_constant is not None
        return GaussMarkovShapes(basis, start, end, self.intensity, self.time_constant)


class WhiteShapes:
    """intensity x phi_k(t)."""

    def __init__(self, basis: NoiseBasis, start: float, end: float, intensity: float) -> None:
        self.basis, self.start, self.length = basis, start, end - start
        self.intensity = intensity
        self.count = basis.terms

    def _unit(self, times: FloatArray) -> FloatArray:
        return np.clip((times - self.start) / self.length, 0.0, 1.0)

    def values(self, times: FloatArray) -> FloatArray:
        """(count, m) values at times of shape (m,)."""
        return self.basis.values(self._unit(times)) * (self.intensity / np.sqrt(self.length))

    def integrals(self, times: FloatArray) -> FloatArray:
        """(count, m) integrals from the arc's start to each time."""
        return self.basis.integrals(self._unit(times)) * (self.intensity * np.sqrt(self.length))


class GaussMarkovShapes:
    """intensity x (exp(-(t-a)/tau), sqrt(2/tau) int_a^t exp(-(t-s)/tau) phi_k(s) ds).

    The first germ variable is the carried value over its stationary standard deviation. The
    convolutions psi_k obey psi' = phi - psi/tau; they are integrated once by Gauss quadrature on
    a fine grid and interpolated with their exact slopes, to about 1e-10 of their size.
    """

    def __init__(
        self, basis: NoiseBasis, start: float, end: float, intensity: float, time_constant: float
    ) -> None:
        self.basis, self.start, self.length = basis, start, end - start
        self.intensity, self.time_constant = intensity, time_constant
        self.count = basis.terms + 1
        from scipy.interpolate import CubicHermiteSpline  # slow to import, and seldom needed

        self._white = WhiteShapes(basis, start, end, 1.0)
        # 100 points per e-folding or per half wave of the fastest function
        scale = min(time_constant, self.length / (basis.terms + 1))
        points = int(np.clip(100.0 * self.length / scale, 200, 200_000))
        grid = np.linspace(start, end, points + 1)
        step = grid[1] - grid[0]
        nodes, weights = np.polynomial.legendre.leggauss(6)
        inner = grid[:-1, None] + 0.5 * step * (nodes + 1.0)
        decay = np.exp(-(grid[1:, None] - inner) / time_constant)
        phi = self._white.values(inner.ravel()).reshape(basis.terms, points, 6)
        gains = 0.5 * step * np.einsum("kpi,pi->kp", phi, weights * decay)
        psi = _leaky_sum(gains, float(np.exp(-step / time_constant)))
        slopes = self._white.values(grid) - psi / time_constant
        self._psi = CubicHermiteSpline(grid, psi, slopes, axis=1)
        self._gain = np.sqrt(2.0 / time_constant)

    def values(self, times: FloatArray) -> FloatArray:
        """(count, m) values at times of shape (m,)."""
        times = np.asarray(times, float)
        carried = np.exp(-(times - self.start) / self.time_constant)
        return self.intensity * np.vstack([carried, self._gain * self._psi(times)])

    def integrals(self, times: FloatArray) -> FloatArray:
        """(count, m) integrals from the arc's start, from tau (int phi - psi) = int psi."""
        times = np.asarray(times, float)
        tau = self.time_constant
        carried = -tau * np.expm1(-(times - self.start) / tau)
        psi = tau * (self._white.integrals(times) - self._psi(times))
        return self.intensity * np.vstack([carried, self._gain * psi])


def _leaky_sum(gains: FloatArray, decay: float) -> FloatArray:
    """y_0 = 0, y_{i+1} = decay y_i + gains_i along the last axis."""
    from scipy.signal import lfilter

    filtered = lfilter([1.0], [1.0, -decay], gains, axis=-1)
    return np.concatenate([np.zeros((gains.shape[0], 1)), filtered], axis=1)


Shapes = WhiteShapes | GaussMarkovShapes
