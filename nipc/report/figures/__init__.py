"""The figures of a result: one function each, from a dataset to its axes.

Each raises KeyError, saying what is missing, when the result cannot fill it; `catalogue` tells
beforehand which figures a result can fill.
"""

from nipc.report.figures.bands import bands
from nipc.report.figures.catalogue import Entry, catalogue
from nipc.report.figures.chain import chain
from nipc.report.figures.confinement import confinement, joint_confinement
from nipc.report.figures.decay import coefficient_decay
from nipc.report.figures.density import chart_density, density
from nipc.report.figures.drivers import driver_ranking, driver_shares
from nipc.report.figures.failures import failure_places, failures
from nipc.report.figures.frequencies import driver_bands
from nipc.report.figures.noise import noise_kept
from nipc.report.figures.separation import lyapunov_exponents
from nipc.report.figures.spreading import diffusion, nonlinear_share, spread_rate
from nipc.report.figures.trust import check_error, direct_against_expansion

__all__ = [
    "Entry",
    "bands",
    "catalogue",
    "chain",
    "chart_density",
    "check_error",
    "coefficient_decay",
    "confinement",
    "density",
    "diffusion",
    "direct_against_expansion",
    "driver_bands",
    "driver_ranking",
    "driver_shares",
    "failure_places",
    "failures",
    "joint_confinement",
    "lyapunov_exponents",
    "noise_kept",
    "nonlinear_share",
    "spread_rate",
]
