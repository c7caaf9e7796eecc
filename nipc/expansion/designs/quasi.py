"""Low-discrepancy and stratified nodes, carried to each variable by its inverse distribution."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from scipy.stats import qmc

from nipc.arrays import FloatArray


def sobol(distributions: Sequence[Any], count: int, seed: int, skip: int = 0) -> FloatArray:
    """Nodes skip ... skip + count - 1 of a scrambled Sobol' sequence: (count, variables).

    The first nodes stay the same when more are asked for, so a design can be extended. Owen (1998),
    ACM Transactions on Modeling and Computer Simulation 8(1).
    """
    engine = qmc.Sobol(len(distributions), scramble=True, rng=np.random.default_rng(seed))
    if skip:
        engine.fast_forward(skip)
    # a power of two is drawn so that scipy has nothing to warn of
    drawn = (
        engine.random_base2(int(np.ceil(np.log2(max(count, 1)))))
        if skip == 0
        else (engine.random(count))
    )
    return _carried(distributions, drawn[:count])


def latin_hypercube(distributions: Sequence[Any], count: int, seed: int) -> FloatArray:
    """One node in each of `count` strata of every variable: (count, variables).

    McKay, Beckman & Conover (1979), Technometrics 21(2).
    """
    engine = qmc.LatinHypercube(len(distributions), rng=np.random.default_rng(seed))
    return _carried(distributions, engine.random(count))


def _carried(distributions: Sequence[Any], uniform: FloatArray) -> FloatArray:
    uniform = np.clip(uniform, 1e-12, 1.0 - 1e-12)
    columns = [np.ravel(d.inv(uniform[:, k])) for k, d in enumerate(distributions)]
    return np.stack(columns, axis=1)
