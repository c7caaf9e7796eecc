"""The answers of a single arc: moments and driver shares in closed form, the rest by ensemble."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from nipc.answers.bands import add_bands, arc_responses
from nipc.answers.endings import endings_of
from nipc.answers.ensemble import add_ensemble
from nipc.answers.evidence import add_degree_norms, add_noise_bases, degree_norms
from nipc.answers.exits import EXIT_MEMBERS, ExitDrivers
from nipc.answers.intervals import Interval, normal_factor, widen
from nipc.answers.separation import add_exponents, arc_logs, worst_error
from nipc.answers.spreading import spread_rate
from nipc.answers.table import ResultTable
from nipc.arrays import BoolArray, FloatArray
from nipc.chain.agreement import Agreement
from nipc.chain.check import HeldOut
from nipc.chain.single_arc import SingleArc, generator
from nipc.problem.study import Study

BLOCK = 4096


def single_arc_table(arc: SingleArc) -> ResultTable:
    """All answers that one arc's expansion gives."""
    groups = arc.germ.groups()
    table = ResultTable(arc.study, tuple((g.name, g.kind) for g in groups))
    add_moments(table, arc)
    add_check(table, arc.check, _sample(arc), arc.study)
    rms = np.nan_to_num(arc.check.rms)
    margin = normal_factor() * np.maximum(rms, np.nan_to_num(_residual(arc)))
    members = Members(arc)
    add_ensemble(table, members.blocks(), margin, arc.check.trust_horizon(arc.study.tolerance))
    members.add_endings(table)
    _add_exit_drivers(table, members)
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


class Members:
    """The ensemble by the expansion, those that end early for a physical reason among it."""

    def __init__(self, arc: SingleArc) -> None:
        self.arc, self.endings = arc, endings_of(arc)
        self._chance = generator(arc.study, "endings")
        self._ended: list[FloatArray] = []

    def at(self, nodes: FloatArray, uniform: FloatArray) -> tuple[FloatArray, FloatArray | None]:
        """(quantities (n, T, Q), NaN once ended; times of ending (n,), or None if none can)."""
        values = self.arc.quantities(nodes)
        if self.endings is None:
            return values, None
        ended = self.endings.draw(nodes, values, uniform)
        values[self.arc.times >= ended[:, None]] = np.nan
        return values, ended

    def blocks(self) -> Iterator[tuple[FloatArray, FloatArray | None]]:
        """The ensemble, block by block."""
        rng = generator(self.arc.study, "ensemble")
        for count in _parts(self.arc.study.ensemble.members):
            nodes = self.arc.germ.sample(rng, count)
            values, ended = self.at(nodes, self.uniform(count))
            if ended is not None:
                self._ended.append(ended)
            yield values, ended

    def uniform(self, count: int) -> FloatArray:
        """What decides, beside the germ, who ends."""
        return self._chance.random(count)

    def add_endings(self, table: ResultTable) -> None:
        """P(ended by t); and what the direct runs leave open of it widens the probabilities."""
        if self.endings is None:
            return
        share, ends = self.endings.share(np.concatenate(self._ended))
        table.notes.append(self.endings.note)
        add_ended(table, share, ends, self._beyond)
        if self._beyond.any() and "exit_time_quantile" in table.variables:
            for end in ("", "_low", "_high"):
                times = table.variables[f"exit_time_quantile{end}"][1]
                times[np.isfinite(times) & (times >= self.arc.times[self._beyond][0])] = np.nan

    @property
    def _beyond(self) -> BoolArray:
        """(T,) output times at which too few runs go on for an expansion."""
        return np.asarray(np.isnan(self.arc.expansion.coefficients).any(axis=(0, 2)))


def add_ended(
    table: ResultTable, share: FloatArray, ends: Interval, beyond: BoolArray | None = None
) -> None:
    """P(ended by t) (T,) with its interval; the probabilities of staying are widened by it.

    Nothing is said of staying at the times `beyond` (T,).
    """
    words = "P(ended by t for a physical reason)"
    ends = Interval(np.clip(ends.low, 0.0, 1.0), np.clip(ends.high, 0.0, 1.0))
    table.add("ended_probability", ("time",), share, "1", words)
    for end, values in (("low", ends.low), ("high", ends.high)):
        label = f"{words}, {end} end of its 95 % interval"
        table.add(f"ended_probability_{end}", ("time",), values, "1", label)
    error = np.maximum(share - ends.low, ends.high - share)
    for name in ("inside", "survival", "joint_inside", "joint_survival"):
        variable = f"{name}_probability"
        if variable not in table.variables:
            continue
        middle = table.variables[variable][1]
        low, high = (table.variables[f"{variable}_{end}"] for end in ("low", "high"))
        wide = widen(Interval(low[1], high[1]), middle, error)
        low[1][...], high[1][...] = np.clip(wide.low, 0.0, 1.0), np.clip(wide.high, 0.0, 1.0)
        if beyond is not None:
            for values in (middle, low[1], high[1]):
                values[:, beyond] = np.nan


def _parts(members: int) -> list[int]:
    """Sizes of the blocks of so many members."""
    return [min(BLOCK, members - at) for at in range(0, members, BLOCK)]


def _add_exit_drivers(table: ResultTable, members: Members) -> None:
    arc = members.arc
    groups = arc.germ.groups()
    rng = generator(arc.study, "pick and freeze")
    exits = ExitDrivers(arc.study, [g.name for g in groups])
    if not exits.boxes:
        return
    for count in _parts(min(arc.study.ensemble.members, EXIT_MEMBERS)):
        a, b = arc.germ.sample(rng, count), arc.germ.sample(rng, count)
        chance = members.uniform(count)

        def mixed(
            a: FloatArray = a, b: FloatArray = b, chance: FloatArray = chance
        ) -> Iterator[tuple[FloatArray, FloatArray | None]]:
            for group in groups:
                nodes = a.copy()
                nodes[:, group.columns] = b[:, group.columns]
                yield members.at(nodes, chance)

        exits.update(members.at(a, chance), members.at(b, members.uniform(count)), mixed())
    exits.add_to(table)


def _sample(arc: SingleArc) -> FloatArray:
    """Quantities (n, T, Q) of a block of members."""
    return arc.quantities(arc.germ.sample(generator(arc.study, "ensemble"), BLOCK))


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
    constant = expansion.constant  # to rounding: no spread at all
    error, std = _residual(arc), np.where(constant, 0.0, expansion.std)
    error = np.where(constant, 0.0, error)
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


def add_check(table: ResultTable, check: HeldOut, sample: FloatArray, settings: Study) -> None:
    """The held-out check: path error over time, trust horizons, and the paths themselves.

    `sample` (n, T, Q) is of the ensemble, against which the direct runs' distribution is held.
    """
    unit = "as the quantity"
    table.over_time(
        "check_error", check.error, "1", "held-out path error over the standard deviation"
    )
    paths = check.trust_horizon(settings.tolerance)
    clock = table.study.clock.unit
    table.by_quantity(
        "trust_horizon",
        paths,
        clock,
        "time up to which held-out direct runs agree within the tolerance",
    )
    found = Agreement.of(check, sample)
    table.by_quantity(
        "trust_horizon_distribution",
        found.trust_horizon(settings.check.distribution, paths),
        clock,
        "time up to which mean and standard deviation are shown to be right by paired direct runs",
    )
    for name, value, ends, words in (
        ("mean", found.mean, (found.mean_low, found.mean_high), "the true mean less this one"),
        ("std", found.std, (found.std_low, found.std_high), "the true spread less this one"),
    ):
        words += ", by paired direct runs, over the standard deviation"
        table.over_time(f"check_{name}_shift", value, "1", words, Interval(*ends))
    words = "two-sample Kolmogorov-Smirnov probability, direct runs against the ensemble"
    table.over_time("check_p_value", found.p_value, "1", words)
    dims = ("check_member", "quantity", "time")
    for name, values, words in (
        ("direct_quantity", check.direct, "held-out direct runs"),
        ("expansion_quantity", check.predicted, "the same members by expansion"),
    ):
        table.add(name, dims, np.swapaxes(values, 1, 2), unit, words)
