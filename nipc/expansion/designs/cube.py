"""Space-filling designs: points of the unit cube, carried to the germ by quantile functions."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtri

from nipc.arrays import FloatArray


@dataclass(frozen=True)
class CubeDesign(ABC):
    """Points in (0, 1)^n_variables; the same seed gives the same points."""

    n_variables: int
    seed: int

    def start(self, n_runs: int) -> FloatArray:
        """The first points: (n_runs, n_variables)."""
        return self.extend(np.empty((0, self.n_variables)), n_runs)

    @abstractmethod
    def extend(self, taken: FloatArray, n_runs: int) -> FloatArray:
        """Further points (n_runs, n_variables) that go with the points `taken` before."""


def quantiles(points: FloatArray, distributions: Sequence[Any] | None = None) -> FloatArray:
    """Germ nodes (n, variables) of points of the unit cube.

    distributions: chaospy's, one per variable; standard normal when left out.
    """
    if distributions is None:
        return np.asarray(ndtri(points))
    columns = [np.ravel(part.inv(points[:, k])) for k, part in enumerate(list(distributions))]
    return np.column_stack(columns)
