"""Which figures a result can fill, in the order in which they are read."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from itertools import pairwise
from typing import Any

import xarray as xr

from nipc.problem.noise import BASES
from nipc.report import reading
from nipc.report.figures.bands import bands
from nipc.report.figures.chain import chain
from nipc.report.figures.confinement import confinement, joint_confinement
from nipc.report.figures.decay import coefficient_decay
from nipc.report.figures.density import chart_density, density, ensemble, spreading_components
from nipc.report.figures.drivers import driver_ranking, driver_shares
from nipc.report.figures.failures import failure_places, failures
from nipc.report.figures.frequencies import band_parts, driver_bands
from nipc.report.figures.noise import noise_kept
from nipc.report.figures.separation import lyapunov_exponents
from nipc.report.figures.spreading import diffusion, nonlinear_share, spread_rate
from nipc.report.figures.trust import check_error, direct_against_expansion


@dataclass(frozen=True)
class Entry:
    """One figure that can be drawn: its function's name, and what it is of (quantities, mostly)."""

    name: str
    of: tuple[str, ...]
    caption: str
    draw: Callable[[], Any]

    @property
    def quantity(self) -> str | None:
        """The quantity, or the joint box, of a figure of one."""
        single = self.name in PER_QUANTITY or self.name == "joint_confinement"
        return self.of[0] if single else None


PER_QUANTITY: dict[str, tuple[Callable[..., Any], str]] = {
    "bands": (bands, "Distribution of {q} over time, and some members of the ensemble."),
    "confinement": (confinement, "Probability that {q} is in its box, with 95 % intervals."),
    "driver_shares": (
        driver_shares,
        "Who drives the spread of {q}: shares of its variance over time.",
    ),
    "driver_ranking": (driver_ranking, "Drivers of {q} at the end of the horizon."),
    "driver_bands": (
        driver_bands,
        "Which frequencies of the noise spread {q}: a narrow peak is a resonance.",
    ),
    "diffusion": (diffusion, "How the variance of {q} grows."),
    "direct_against_expansion": (
        direct_against_expansion,
        "Members that the fit never saw: {q} by direct runs and by the expansion.",
    ),
}
OVERALL: dict[str, tuple[Callable[..., Any], str]] = {
    "spread_rate": (
        spread_rate,
        "Spread rate of every quantity; thin past its trust horizon, which is marked.",
    ),
    "lyapunov_exponents": (
        lyapunov_exponents,
        "How fast neighbouring motions move apart: what falls with the dotted line does not do so "
        "exponentially.",
    ),
    "nonlinear_share": (
        nonlinear_share,
        "Share of the variance beyond degree one: near 0, a linear picture is enough.",
    ),
    "check_error": (
        check_error,
        "Error of held-out paths against direct runs, over the spread; a marker where "
        "it passes the tolerance for good.",
    ),
    "chain": (
        chain,
        "The arcs of the chain, each as wide as it is long, and why they are as they are; "
        "errors are of held-out runs at the arc's end, over the spread.",
    ),
    "coefficient_decay": (
        coefficient_decay,
        "How the coefficients fall off with their degree: flat would mean that "
        "the degree is too low.",
    ),
    "failures": (failures, "Why runs of the propagator failed."),
    "failure_places": (
        failure_places,
        "Where runs failed, beside good runs of the same arcs, in the directions that tell them "
        "best apart, and in how many of all pairs the failed one lies higher or lower. No sign: "
        "no more apart than chance would have them.",
    ),
}
NEEDS = {
    "confinement": ("inside_probability", "survival_probability"),
    "driver_shares": ("driver_first",),
    "driver_ranking": ("driver_total", "driver_first"),
    "spread_rate": ("spread_rate",),
    "lyapunov_exponents": ("lyapunov_exponent",),
    "nonlinear_share": ("nonlinear_share",),
    "check_error": ("check_error",),
    "coefficient_decay": ("degree_norm",),
    "failure_places": ("failed_position",),
}
PAIRS = 3


def _fills(dataset: xr.Dataset, name: str, quantity: str | None) -> bool:
    """Whether a figure has something to show."""
    if quantity is None:
        if name == "chain":
            there = all(reading.has(dataset, f"arc_{what}") for what in ("start", "end", "runs"))
            return there and dataset.sizes["arc"] > 1
        if name == "coefficient_decay":  # of degree one alone nothing falls off
            return reading.has(dataset, "degree_norm") and dataset.sizes["degree"] > 1
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
    if name == "driver_bands":
        return band_parts(dataset, quantity) is not None
    if name.startswith("driver"):
        return any(reading.shares(dataset, n, quantity) is not None for n in NEEDS[name])
    return any(reading.series(dataset, n, quantity) is not None for n in NEEDS[name])


def catalogue(dataset: xr.Dataset) -> Iterator[Entry]:
    """Every figure that this result can fill."""
    for name, (function, caption) in PER_QUANTITY.items():
        for quantity in reading.quantities(dataset):
            if _fills(dataset, name, quantity):
                words = caption.replace("{q}", quantity)
                yield Entry(name, (quantity,), words, partial(function, dataset, quantity))
    yield from _joints(dataset)
    yield from _pairs(dataset)
    yield from _bases(dataset)
    for name, (function, caption) in OVERALL.items():
        if _fills(dataset, name, None):
            yield Entry(name, (), caption, partial(function, dataset))


def _joints(dataset: xr.Dataset) -> Iterator[Entry]:
    """Boxes of several quantities."""
    for joint in reading.joints(dataset):
        if reading.joint_series(dataset, "joint_inside_probability", joint) is not None:
            caption = f"Probability that all quantities of {joint} are in their boxes at once."
            yield Entry(
                "joint_confinement",
                (joint,),
                caption,
                partial(joint_confinement, dataset, joint),
            )


def _pairs(dataset: xr.Dataset) -> Iterator[Entry]:
    """Neighbouring quantities against each other; those that do not spread have no picture."""
    names = [q for q in reading.quantities(dataset) if _fills(dataset, "diffusion", q)]
    if len(names) < 2:  # one quantity has no plane, the chart has
        for x, y in list(pairwise(spreading_components(dataset)))[:1]:
            words = (
                f"Members in the plane of the chart's {x} and {y}; the lines hold the densest 90 %."
            )
            yield Entry("chart_density", (x, y), words, partial(chart_density, dataset, x, y))
    if ensemble(dataset) is None:
        return
    for x, y in list(pairwise(names))[:PAIRS]:
        caption = f"Members in the plane of {x} and {y}; the lines hold the densest 90 %."
        yield Entry("density", (x, y), caption, partial(density, dataset, x, y))


def _bases(dataset: xr.Dataset) -> Iterator[Entry]:
    """What the basis of each noise source keeps, if the result tells its bases."""
    told: dict[tuple[str, int], list[str]] = {}
    for each in reading.listed(dataset, "noise_bases") or []:
        told.setdefault((str(each["basis"]), int(each["terms"])), []).append(str(each["source"]))
    for (basis, terms), names in told.items():
        if basis in BASES:
            words = f"What the basis of {', '.join(names)} keeps of one path of the noise."
            of = (basis, str(terms))
            yield Entry("noise_kept", of, words, partial(noise_kept, BASES[basis](terms)))
