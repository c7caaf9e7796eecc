"""Where the propagator is run: families of nodes; each is one file."""

from nipc.expansion.designs.quasi import latin_hypercube, sobol
from nipc.expansion.designs.sparse import SparseGrid, sparse_grid
from nipc.expansion.designs.subset import Subset, near_optimal_subset

__all__ = [
    "SparseGrid",
    "Subset",
    "latin_hypercube",
    "near_optimal_subset",
    "sobol",
    "sparse_grid",
]
