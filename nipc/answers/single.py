"""The answers of a single arc: moments and driver shares in closed form, the rest by ensemble."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from nipc.answers.bands import add_bands, arc_responses
from nipc.answers.ensemble import add_ensemble
from nipc.answers.evidence import add_degree_norms, add_noise_bases, degree_norms
from nipc.answers.exits import EXIT_MEMBERS, ExitDrivers
from nipc.answers.intervals import Interval, normal_factor
from nipc.answers.separation import add_exponents, arc_logs, worst_error
from nipc.answers.spreading import spread_rate
from nipc.answers.table import ResultTable
from nipc.arrays import FloatArray
from nipc.chain.check import HeldOut
from nipc.chain.single_arc import SingleArc, generator

BLOCK = 4096


def single_arc_table(arc: SingleArc) -> ResultTable:
    """All answers that one arc's expansion gives."""
    groups = arc.germ.groups()
    table = ResultTable(arc.study, tuple((g.name, g.kind) for g in groups))
    add_moments(table, arc)
    add_check(table, arc.check, arc.study.tolerance)
    rms = np.nan_to_num(arc.check.rms)
    margin = normal_factor() * np.maximum(rms, np.nan_to_num(_residual(arc)))
    add_ensemble(table, _blocks(arc), margin, arc.check.trust_horizon(arc.study.tolerance))
    _add_exit_drivers(table, arc)
    add_bands(
        table, arc_responses(arc), arc.check.trust_horizon(arc.study.tolerance), arc.check.rms
    )
    if (logs := arc_logs(arc)) is not None:
        add_exponents(table, logs, arc.study.clock.start, worst_error(arc.check))
    _add_arc(table, arc)
    return table


def _add_arc(table: ResultTable, arc: SingleArc) -> None:
    """The one arc, as a chain tells its arcs, and what its coefficients and bases are like."""
    degrees, germ = arc.expansion.basis.degrees, arc.germ
    flat = arc.expansion.coefficients.reshape(degrees.size, -1)
    add_degree_norms(table, [degree_norms(flat, degrees)])
    add_noise_bases(table, [germ.noise])
    *designed, _ = arc.outcomes
    last = arc.relative_error[-1]
    known = np.isfinite(last).any()
    clock = arc.study.clock
    for name, value, unit, words in (
        ("start", clock.start, clock.unit, "start of the arc"),
        ("end", clock.end, clock.unit, "end of the arc"),
        ("degree", int(degrees.max(initial=0)), "1", "degree of the arc's expansion"),
        ("terms", degrees.size, "1", "terms of the arc's expansion"),
        ("runs", sum(len(o) for o in designed), "1", "runs of the arc's design"),
        ("failed", sum(int((~o.ok).sum()) for o in designed), "1", "of them failed"),
        (
            "error",
            float(np.nanmax(last)) if known else np.nan,
            "1",
            "leave-one-out error at the arc's end over the spread there",
        ),
        ("note", arc.design.words, "", "why the arc is as it is"),
    ):
        table.add(f"arc_{name}", ("arc",), [value], unit, words)


def _blocks(arc: SingleArc) -> Iterator[tuple[FloatArray, None]]:
    rng = generator(arc.study, "ensemble")
    left = arc.study.ensemble.members
    while left > 0:
        count = min(BLOCK, left)
        yield arc.quantities(arc.germ.sample(rng, count)), None
        left -= count


def _add_exit_drivers(table: ResultTable, arc: SingleArc) -> None:
    groups = arc.germ.groups()
    rng = generator(arc.study, "pick and freeze")
    exits = ExitDrivers(arc.study, [g.name for g in groups])
    if not exits.boxes:
        return
    left = min(arc.study.ensemble.members, EXIT_MEMBERS)
    while left > 0:
        count = min(BLOCK, left)
        a, b = arc.germ.sample(rng, count), arc.germ.sample(rng, count)

        def mixed(a: FloatArray = a, b: FloatArray = b) -> Iterator[FloatArray]:
            for group in groups:
                nodes = a.copy()
                nodes[:, group.columns] = b[:, group.columns]
                yield arc.quantities(nodes)

        exits.update(arc.quantities(a), arc.quantities(b), mixed())
        left -= count
    exits.add_to(table)


def _residual(arc: SingleArc) -> FloatArray:
    """(T, Q) leave-one-out error in the quantity's unit."""
    return arc.relative_error * arc.expansion.std


def add_moments(table: ResultTable, arc: SingleArc) -> None:
    """Mean, standard deviation, spread rate, share beyond degree one, driver shares.

    The part of a quantity that the expansion misses has the leave-one-out variance e^2. A
    least-squares residual is uncorrelated with the fit up to sampling, so a variance V is missed by
    e^2 and by 2 e sqrt(V / n) of chance; the mean by e / sqrt(n). The intervals add up both.
    """
    expansion = arc.expansion
    error, std = _residual(arc), expansion.std
    runs = arc.design.nodes.shape[0]
    z = normal_factor()
    chance = z * error / np.sqrt(runs)
    mean = expansion.mean
    unit = "as the quantity"
    table.over_time("mean", mean, unit, "mean", Interval(mean - chance, mean + chance))
    high = np.sqrt(std**2 + error**2) + chance
    table.over_time(
        "std", std, unit, "standard deviation", Interval(np.maximum(std - chance, 0.0), high)
    )
    time = arc.study.clock.unit
    table.over_time(
        "spread_rate",
        spread_rate(std**2, arc.times),
        f"1/{time}",
        "half the log growth rate of the non-constant part",
    )
    constant = expansion.constant
    table.over_time(
        "nonlinear_share",
        np.where(constant, np.nan, expansion.nonlinear_share()),
        "1",
        "share of variance beyond degree one",
    )
    columns = [list(g.columns) for g in arc.germ.groups()]
    with np.errstate(invalid="ignore", divide="ignore"):
        doubt = np.where(constant, np.nan, arc.relative_error**2 + 2.0 * chance / std)
    for name, words, shares in (
        ("driver_first", "first-order share of the variance", expansion.first(columns)),
        ("driver_total", "total share of the variance", expansion.total(columns)),
    ):
        shares = np.where(constant, np.nan, shares)
        ends = Interval(np.clip(shares - doubt, 0.0, 1.0), np.clip(shares + doubt, 0.0, 1.0))
        table.by_driver(name, shares, words, ends)


def add_check(table: ResultTable, check: HeldOut, tolerance: float) -> None:
    """The held-out check: path error over time, trust horizon, and the paths themselves."""
    unit = "as the quantity"
    table.over_time(
        "check_error", check.error, "1", "held-out path error over the standard deviation"
    )
    table.by_quantity(
        "trust_horizon",
        check.trust_horizon(tolerance),
        table.study.clock.unit,
        "time up to which held-out direct runs agree within the tolerance",
    )
    dims = ("check_member", "quantity", "time")
    for name, values, words in (
        ("direct_quantity", check.direct, "held-out direct runs"),
        ("expansion_quantity", check.predicted, "the same members by expansion"),
    ):
        table.add(name, dims, np.swapaxes(values, 1, 2), unit, words)
