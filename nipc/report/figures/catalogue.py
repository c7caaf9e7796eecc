"""Which figures a result can fill, in the order in which they are read."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import xarray as xr

from nipc.report import reading
from nipc.report.figures.bands import bands
from nipc.report.figures.chain import chain
from nipc.report.figures.confinement import confinement
from nipc.report.figures.drivers import driver_ranking, driver_shares
from nipc.report.figures.failures import failures
from nipc.report.figures.spreading import diffusion, nonlinear_share, spread_rate
from nipc.report.figures.trust import check_error, direct_against_expansion


@dataclass(frozen=True)
class Entry:
    """One figure that can be drawn: its function's name, and the quantity it is of."""

    name: str
    quantity: str | None
    caption: str
    draw: Callable[[], Any]


PER_QUANTITY: dict[str, tuple[Callable[..., Any], str]] = {
    "bands": (bands, "Distribution of {q} over time, and some members of the ensemble."),
    "confinement": (confinement, "Probability that {q} is in its box, with 95 % intervals."),
    "driver_shares": (
        driver_shares, "Who drives the spread of {q}: shares of its variance over time."),
    "driver_ranking": (driver_ranking, "Drivers of {q} at the end of the horizon."),
    "diffusion": (diffusion, "How the variance of {q} grows."),
    "direct_against_expansion": (
        direct_against_expansion,
        "Members that the fit never saw: {q} by direct runs and by the expansion."),
}
OVERALL: dict[str, tuple[Callable[..., Any], str]] = {
    "spread_rate": (
        spread_rate, "Spread rate of every quantity; thin past its trust horizon, which is "
        "marked."),
    "nonlinear_share": (
        nonlinear_share, "Share of the variance beyond degree one: near 0, a linear picture is "
        "enough."),
    "check_error": (
        check_error, "Error of held-out paths against direct runs, over the spread; a marker where "
        "it passes the tolerance for good."),
    "chain": (chain, "The arcs of the chain: degree, runs, and error at their held-out runs."),
    "failures": (failures, "Why runs of the propagator failed."),
}
NEEDS = {
    "confinement": ("inside_probability", "survival_probability"),
    "driver_shares": ("driver_first",),
    "driver_ranking": ("driver_total", "driver_first"),
    "spread_rate": ("spread_rate",),
    "nonlinear_share": ("nonlinear_share",),
    "check_error": ("check_error",),
}


def _fills(dataset: xr.Dataset, name: str, quantity: str | None) -> bool:
    """Whether a figure has something to show."""
    if quantity is None:
        if name == "chain":
            return reading.has(dataset, "arc_start") and reading.has(dataset, "arc_runs")
        if name == "failures":
            return bool(reading.listed(dataset, "failures"))
        return any(reading.has(dataset, needed) for needed in NEEDS[name])
    if name == "bands":
        return any(reading.series(dataset, n, quantity) is not None for n in ("quantile", "mean"))
    if name == "diffusion":
        spread = reading.series(dataset, "std", quantity)
        return spread is not None and int((spread[1:] > 0).sum()) >= 2
    if name == "direct_against_expansion":
        both = ("direct_quantity", "expansion_quantity")
        return all(reading.series(dataset, n, quantity) is not None for n in both)
    if name.startswith("driver"):
        return any(reading.shares(dataset, n, quantity) is not None for n in NEEDS[name])
    return any(reading.series(dataset, n, quantity) is not None for n in NEEDS[name])


def catalogue(dataset: xr.Dataset) -> Iterator[Entry]:
    """Every figure that this result can fill."""
    for name, (function, caption) in PER_QUANTITY.items():
        for quantity in reading.quantities(dataset):
            if _fills(dataset, name, quantity):
                yield Entry(name, quantity, caption.replace("{q}", quantity),
                            lambda f=function, q=quantity: f(dataset, q))  # type: ignore[misc]
    for name, (function, caption) in OVERALL.items():
        if _fills(dataset, name, None):
            yield Entry(name, None, caption, lambda f=function: f(dataset))  # type: ignore[misc]
