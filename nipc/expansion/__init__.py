"""Polynomial chaos expansions: bases, designs, fits, and what follows from the coefficients."""

from nipc.expansion.basis import Basis, ProductBasis
from nipc.expansion.designs.subset import Subset, near_optimal_subset
from nipc.expansion.expansion import Expansion
from nipc.expansion.fits.fit import Fit, finite_rows
from nipc.expansion.fits.least_squares import christoffel_weights, least_squares
from nipc.expansion.indices import explicit, hyperbolic, total_degree, weighted
from nipc.expansion.recurrence import Recurrence, hermite, legendre, recurrence_of
from nipc.expansion.sampled import SampledBasis, Whitening
from nipc.expansion.tensor import TensorBasis

__all__ = [
    "Basis",
    "Expansion",
    "Fit",
    "ProductBasis",
    "Recurrence",
    "SampledBasis",
    "Subset",
    "TensorBasis",
    "Whitening",
    "christoffel_weights",
    "explicit",
    "finite_rows",
    "hermite",
    "hyperbolic",
    "least_squares",
    "legendre",
    "near_optimal_subset",
    "recurrence_of",
    "total_degree",
    "weighted",
]
