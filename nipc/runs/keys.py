"""key = sha256(propagator, forcing model, times | start, coefficients, parameters).

Two runs have one key exactly when the propagator would be asked the same question, bit for bit.
What all runs of a batch share is hashed once.
"""

from __future__ import annotations

import hashlib

import numpy as np

from nipc.arrays import FloatArray
from nipc.runs.propagator import Batch

_VERSION = b"nipc run key 1"


def little(array: FloatArray) -> bytes:
    """The numbers as raw little-endian float64, in C order."""
    return array.astype("<f8", copy=False).tobytes()


def arc_digest(batch: Batch, fingerprint: str) -> bytes:
    """Identity of what all runs of a batch share: propagator, forcing model, times, widths."""
    digest = hashlib.sha256(_VERSION)
    widths = (batch.states.shape[1], batch.forcing.coefficients.shape[1], batch.parameters.shape[1])
    for part in (
        fingerprint.encode(),
        batch.forcing.digest(),
        little(batch.times),
        repr(widths).encode(),
    ):
        digest.update(len(part).to_bytes(8, "little"))
        digest.update(part)
    return digest.digest()


def run_keys(batch: Batch, fingerprint: str) -> list[bytes]:
    """One key of 32 bytes a run."""
    shared = hashlib.sha256(arc_digest(batch, fingerprint))
    rows = np.concatenate(
        [batch.states, batch.forcing.coefficients, batch.parameters], axis=1
    ).astype("<f8", copy=False)
    keys = []
    for row in np.ascontiguousarray(rows):
        own = shared.copy()
        own.update(row.tobytes())
        keys.append(own.digest())
    return keys


def block_digest(keys: list[bytes]) -> bytes:
    """Identity of runs that were propagated together in one call, in their order."""
    return hashlib.sha256(b"".join(keys)).digest()
