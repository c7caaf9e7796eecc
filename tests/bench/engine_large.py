"""Many long runs kept and fitted by least squares without ever being in memory together.

python engine_large.py FOLDER RUNS TIMES prints {"seconds", "peak_bytes", "error"}.
"""

from __future__ import annotations

import json
import resource
import sys
import time
from pathlib import Path

import numpy as np
from engine import Trivial, trivial_batch
from scipy.linalg import qr, solve_triangular

from nipc.expansion.basis import ProductBasis
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger


def main(folder: Path, n: int, times: int) -> None:
    began = time.perf_counter()
    batch = trivial_batch(n, times=times)
    germ = batch.forcing.coefficients
    with Ledger.open(folder) as ledger, Engine(Trivial(vectorised=True), ledger) as engine:
        engine.ensure(batch, "all")
        basis = ProductBasis.standard_normal(germ.shape[1], 2)
        q, r = qr(basis.evaluate(germ).T, mode="economic", check_finite=False)
        projected = np.zeros((basis.n_terms, times * batch.states.shape[1]))
        sums = np.zeros(batch.states.shape[1])
        for part, outcomes in engine.pieces(batch):
            assert outcomes.ok.all()
            projected += q[part].T @ outcomes.states.reshape(len(outcomes), -1)
            sums += outcomes.states[:, -1].sum(axis=0)
        coefficients = solve_triangular(r, projected)
    seconds = time.perf_counter() - began
    # the states do not depend on the germ: the fit of a constant is, up to 1/sqrt(n), their mean
    mean = coefficients[0].reshape(times, -1)[-1]
    error = float(np.abs(mean - sums / n).max())
    assert error < 20.0 / np.sqrt(n) * np.sqrt(basis.n_terms / n) + 1e-12
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    print(json.dumps({"seconds": seconds, "peak_bytes": peak, "error": error}))


if __name__ == "__main__":
    main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
