"""Polynomial chaos expansions: bases, designs, fits, and what follows from the coefficients."""

from typing import TYPE_CHECKING, Any

from nipc.expansion.basis import Basis, ProductBasis
from nipc.expansion.bootstrap import Interval, Intervals, bootstrap
from nipc.expansion.choice import Choice, choose_truncation
from nipc.expansion.designs.cube import CubeDesign, quantiles
from nipc.expansion.designs.latin_hypercube import LatinHypercube
from nipc.expansion.designs.sobol import SobolDesign
from nipc.expansion.designs.sparse_grid import SparseGrid, sparse_grid
from nipc.expansion.designs.subset import Subset, near_optimal_subset
from nipc.expansion.enrichment import Enriched, enrich
from nipc.expansion.expansion import Expansion
from nipc.expansion.fits.cross_validation import cross_validated
from nipc.expansion.fits.fit import Fit, finite_rows
from nipc.expansion.fits.least_angle import entry_order, least_angle
from nipc.expansion.fits.least_squares import christoffel_weights, least_squares
from nipc.expansion.indices import explicit, hyperbolic, total_degree, weighted
from nipc.expansion.recurrence import (
    Recurrence,
    hermite,
    legendre,
    recurrence_of,
    recurrence_of_points,
)
from nipc.expansion.sampled import SampledBasis, Whitening
from nipc.expansion.tensor import TensorBasis

if TYPE_CHECKING:
    from nipc.expansion.regressor import ChaosRegressor

__all__ = [
    "Basis",
    "ChaosRegressor",
    "Choice",
    "CubeDesign",
    "Enriched",
    "Expansion",
    "Fit",
    "Interval",
    "Intervals",
    "LatinHypercube",
    "ProductBasis",
    "Recurrence",
    "SampledBasis",
    "SobolDesign",
    "SparseGrid",
    "Subset",
    "TensorBasis",
    "Whitening",
    "bootstrap",
    "choose_truncation",
    "christoffel_weights",
    "cross_validated",
    "enrich",
    "entry_order",
    "explicit",
    "finite_rows",
    "hermite",
    "hyperbolic",
    "least_angle",
    "least_squares",
    "legendre",
    "near_optimal_subset",
    "quantiles",
    "recurrence_of",
    "recurrence_of_points",
    "sparse_grid",
    "total_degree",
    "weighted",
]


def __getattr__(name: str) -> Any:
    # the estimator needs scikit-learn, whose import takes a second: only when it is asked for
    if name == "ChaosRegressor":
        from nipc.expansion.regressor import ChaosRegressor

        return ChaosRegressor
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
