"""q(t) = c_0 + sum_j int k_j(s) dW_j(s) + ...: first-order response to a source, by frequency.

The variance that source j gives is int k^2 ds = 2 int_0^inf |K(f)|^2 df with
K(f) = int k(s) exp(-2 pi i f s) ds (Parseval): 2 |K|^2 tells which frequencies of the noise drive
the quantity. The kernel k is known by coefficients on orthonormal functions of time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise import NoiseBasis

POINTS = 24  # Gauss nodes a panel, over which |K|^2 turns at most five times


@dataclass(frozen=True, eq=False)
class Stretch:
    """Coefficients (terms,) of a kernel on a basis, on [start, start + length]."""

    basis: NoiseBasis
    start: float
    length: float
    coefficients: FloatArray


@dataclass(frozen=True, eq=False)
class Response:
    """A quantity's first-order response at one time to one source.

    `memory`: of a Gauss-Markov source the coefficient of its value at `start`, which is
    sqrt(2 / tau) int_{-inf}^start exp((s - start) / tau) dW, and tau. Each coefficient carries an
    independent error of variance `noise`; `elapsed` is the time since the start.
    """

    stretches: tuple[Stretch, ...]
    start: float
    elapsed: float
    memory: tuple[float, float] | None = None
    noise: float = 0.0

    @property
    def count(self) -> int:
        """Number of coefficients."""
        return sum(s.coefficients.size for s in self.stretches) + (self.memory is not None)

    @property
    def variance(self) -> float:
        """int k^2 ds, the sum of the squared coefficients, freed of what their errors add."""
        squares = sum(float(s.coefficients @ s.coefficients) for s in self.stretches)
        if self.memory is not None:
            squares += self.memory[0] ** 2
        return squares - self.noise * self.count

    @property
    def finest(self) -> float:
        """Twice the frequency up to which the bases resolve: N terms in h reach N / 2h."""
        return max((s.coefficients.size / s.length for s in self.stretches), default=0.0)

    def power(self, frequencies: FloatArray) -> tuple[FloatArray, FloatArray]:
        """2 |K(f)|^2 and what coefficients of unit variance would add to it, each (F,)."""
        total = np.zeros(frequencies.size, dtype=complex)
        level = np.zeros(frequencies.size)
        known: dict[tuple[str, int, float], np.ndarray] = {}
        for stretch in self.stretches:
            key = (stretch.basis.name, stretch.basis.terms, round(stretch.length, 12))
            if key not in known:
                known[key] = transform(stretch.basis, stretch.length, frequencies)
            functions = known[key]
            turn = np.exp(-2j * np.pi * frequencies * (stretch.start - self.start))
            total += turn * (stretch.coefficients @ functions)
            level += np.sum(np.abs(functions) ** 2, axis=0)
        if self.memory is not None:
            coefficient, tau = self.memory
            past = np.sqrt(2.0 / tau) / (1.0 / tau - 2j * np.pi * frequencies)
            total += coefficient * past
            level += np.abs(past) ** 2
        return 2.0 * np.abs(total) ** 2, 2.0 * level

    def between(self, low: float, high: float) -> tuple[float, float]:
        """(variance from frequencies low to high, how many of the coefficients live there)."""
        reach = self.elapsed + (10.0 * self.memory[1] if self.memory else 0.0)
        nodes, weights = panels(low, high, reach)
        parts = np.zeros(2)
        for rows in range(0, nodes.size, 1024):
            here = slice(rows, rows + 1024)
            power, level = self.power(nodes[here])
            parts += weights[here] @ power, weights[here] @ level
        return float(parts[0] - self.noise * parts[1]), float(parts[1])


def transform(basis: NoiseBasis, length: float, frequencies: FloatArray) -> np.ndarray:
    """int phi_k(s) exp(-2 pi i f s) ds on an arc that starts at zero, complex (terms, F)."""
    turns = length * float(np.abs(frequencies).max(initial=0.0))
    nodes, weights = np.polynomial.legendre.leggauss(24 + 2 * basis.terms + int(4.0 * turns))
    u, w = 0.5 * (nodes + 1.0), 0.5 * weights
    wave = np.exp(-2j * np.pi * length * np.outer(u, frequencies))
    return np.asarray(np.sqrt(length) * (basis.values(u) * w) @ wave)


def panels(low: float, high: float, reach: float) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights of integrals over frequency of what lasts no longer than `reach`."""
    count = max(1, int(np.ceil((high - low) * reach / 5.0)))
    edges = np.linspace(low, high, count + 1)
    nodes, weights = np.polynomial.legendre.leggauss(POINTS)
    half = 0.5 * np.diff(edges)[:, None]
    middle = 0.5 * (edges[1:] + edges[:-1])[:, None]
    return (middle + half * nodes).ravel(), (half * weights).ravel()
