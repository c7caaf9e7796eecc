"""Many outputs as few: the leading singular vectors of the standardised outputs.

(Y − centre) / spread = U S Vᵀ,   components U √n,   mixing S Vᵀ · spread / √n
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray, IntArray


@dataclass(frozen=True)
class Compressed:
    """outputs ≈ centre + components @ mixing.

    components (runs, parts); mixing (parts, outputs); centre (outputs,);
    lost (outputs,): root-mean-square of what is left out of each output, in its unit.
    """

    components: FloatArray
    mixing: FloatArray
    centre: FloatArray
    lost: FloatArray


def compress(outputs: FloatArray, spread: FloatArray, loss: float) -> Compressed:
    """Compress outputs (runs, outputs) of deviation `spread` (outputs,), losing at most the share
    `loss` of the standardised variance; outputs that would not come to half as many components are
    left as they are, one component each."""
    n_runs, n_outputs = outputs.shape
    centre = outputs.mean(axis=0)
    alive = np.flatnonzero(spread > 0.0)
    scaled = (outputs[:, alive] - centre[alive]) / spread[alive]
    if alive.size > 2:
        u, s, vt = np.linalg.svd(scaled, full_matrices=False)
        tail = np.concatenate([np.cumsum((s * s)[::-1])[::-1], [0.0]])
        count = int(np.argmax(tail <= loss * tail[0]))
        if count <= alive.size // 2:
            components = u[:, :count] * np.sqrt(n_runs)
            inner = s[:count, None] * vt[:count] / np.sqrt(n_runs)
            rest = 1.0 - np.sum(inner * inner, axis=0)
            lost = np.zeros(n_outputs)
            lost[alive] = np.sqrt(np.maximum(rest, 0.0)) * spread[alive]
            return Compressed(components, _spread_out(inner, alive, spread), centre, lost)
    inner = np.eye(alive.size)
    return Compressed(scaled, _spread_out(inner, alive, spread), centre, np.zeros(n_outputs))


def _spread_out(inner: FloatArray, alive: IntArray, spread: FloatArray) -> FloatArray:
    mixing = np.zeros((inner.shape[0], spread.size))
    mixing[:, alive] = inner * spread[alive]
    return mixing
