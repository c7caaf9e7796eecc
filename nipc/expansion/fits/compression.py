"""Many outputs as few: the leading singular vectors of the standardised outputs.

(Y − mean) / spread ≈ components · mixing
"""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


def compress(
    outputs: FloatArray, spread: FloatArray, loss: float
) -> tuple[FloatArray, FloatArray | None]:
    """Components (runs, parts) and mixing (parts, outputs) of outputs (runs, outputs).

    At most the share `loss` of the standardised variance is lost. Outputs that would not come to
    half as many components are returned as they are, and None. spread (outputs,): their standard
    deviations, none zero.
    """
    if outputs.shape[1] <= 2:
        return outputs, None
    scaled = (outputs - outputs.mean(axis=0)) / spread
    u, s, vt = np.linalg.svd(scaled, full_matrices=False)
    tail = np.concatenate([np.cumsum((s * s)[::-1])[::-1], [0.0]])
    count = int(np.argmax(tail <= loss * tail[0]))
    if count > outputs.shape[1] // 2:
        return outputs, None
    root = np.sqrt(outputs.shape[0])
    return u[:, :count] * root, s[:count, None] * vt[:count] / root
