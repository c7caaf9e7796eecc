"""The answers of a chain of arcs, all from ensembles pushed through its composed expansions."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from nipc.answers.bands import add_bands
from nipc.answers.chain_linear import ChainLinear
from nipc.answers.drivers import PickFreezeAccumulator
from nipc.answers.ensemble import CLOUD, add_ensemble, cloud_rows
from nipc.answers.evidence import add_degree_norms, add_noise_bases, degree_norms
from nipc.answers.exits import ExitDrivers
from nipc.answers.intervals import Interval, normal_factor, wilson
from nipc.answers.separation import add_exponents, chain_logs, worst_error
from nipc.answers.single import add_check, add_ended
from nipc.answers.spreading import spread_rate
from nipc.answers.table import ResultTable
from nipc.arrays import BoolArray, FloatArray
from nipc.chain.arc import ArcMap
from nipc.chain.chain import Chain
from nipc.chain.check import HeldOut
from nipc.chain.history import BLOCK, NoiseHistory, blocks_of
from nipc.chain.horizon import Horizon
from nipc.problem.quantities import QuantitySet


class ChainAnswers:
    """Members of a solved chain as quantities, and everything that follows from them."""

    def __init__(self, horizon: Horizon, chain: Chain, quantities: QuantitySet) -> None:
        self.horizon, self.chain, self.quantities = horizon, chain, quantities
        self.times = horizon.outputs
        self.groups = horizon.germ.groups()
        self.cloud = np.empty((0, 0, 0))  # chart values of the first members at some times
        self.ensemble_lost = 0
        # when those asked for last ended, NaN where they did not
        self.ended: FloatArray = np.empty(0)
        self.all_ended: list[FloatArray] = []
        self.lost = 0.0  # share of the members asked for last that ended far outside the designs
        self.outside: BoolArray = np.zeros(0, dtype=bool)  # which of them

    def of_values(self, values: FloatArray, parameters: FloatArray) -> FloatArray:
        """Quantities (n, T, Q) of chart values (n, T, d)."""
        states = self.horizon.chart.to_state(values, self.times * self.horizon.chart_time)
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.quantities(self.times, states, parameters)

    def members(
        self,
        history: NoiseHistory,
        streams: tuple[str, ...],
        block: int,
        count: int,
        direct: bool = False,
        onward: bool = False,
    ) -> FloatArray:
        """Quantities (n, T, Q) of a block of members; NaN beyond what the chain reached.

        With `direct`, members far outside an arc's design are run by the propagator, and those
        that went on where the arcs stopped have their values: for the ensemble itself. `onward`:
        members that end have values by the arcs all the same, as a regression needs.
        """
        horizon = self.horizon
        nodes = horizon.nodes(streams, block, count)
        members = horizon.members_of(nodes, history, block)
        values = np.full((count, self.times.size, members.values.shape[1]), np.nan)
        values[:, self.times <= horizon.edges[0]] = members.values[:, None]
        for arc in self.chain.maps:
            granted = horizon.granted(arc, block) if direct else 0
            steps, members = horizon.advance(arc, members, history, block, granted)
            values[:, horizon.output_rows(arc)] = steps[:, horizon.inner_times(arc)]
        self.outside, self.ended = members.lost, members.ended.copy()
        self.lost = float(members.lost.mean())
        if direct and block == 0 and (beyond := self.chain.continued) is not None:
            some = min(count, beyond.values.shape[0])
            values[:some, beyond.rows] = beyond.values[:some]
            self.ended[:some] = beyond.ended[:some]
        if not onward:
            values[self.times >= self.ended[:, None]] = np.nan
        if direct and block == 0:
            self.cloud = values[:CLOUD, cloud_rows(self.times)]
        return self.of_values(values, members.parameters)

    def plain(self) -> Iterator[tuple[FloatArray, FloatArray]]:
        """The ensemble, block by block."""
        self.ensemble_lost = 0
        self.all_ended = []
        streams = self.horizon.streams("a")
        for block, count in blocks_of(self.horizon.study.ensemble.members):
            values = self.members(self.horizon.history, streams, block, count, direct=True)
            self.ensemble_lost += round(self.lost * count)
            self.all_ended.append(self.ended)
            yield values, self.ended

    def table(self) -> ResultTable:
        """All answers of the chain."""
        study = self.horizon.study
        table = ResultTable(study, tuple((g.name, g.kind) for g in self.groups))
        check = self.checked(self._spread())
        known = np.maximum(np.isfinite(check.direct - check.predicted).sum(axis=0), 1)
        rms = np.nan_to_num(check.rms)
        trust = check.trust_horizon(study.tolerance)
        moments = add_ensemble(table, self.plain(), normal_factor() * rms, trust)
        self._cloud(table)
        std = moments.std
        held = HeldOut(self.times, check.direct, check.predicted, std)
        add_check(table, held, self._first_block(), study)
        unit = "as the quantity"
        mean, std_ends = moments.mean_interval(), moments.std_interval()
        # a path error e that is independent of the path adds e^2 to the variance; one that is not
        # moves the standard deviation by up to its mean over the check's members
        shift = rms / np.sqrt(known)
        table.over_time(
            "mean", moments.mean, unit, "mean", Interval(mean.low - shift, mean.high + shift)
        )
        upper = np.sqrt(std_ends.high**2 + rms**2) + shift
        table.over_time(
            "std", std, unit, "standard deviation",
            Interval(np.maximum(std_ends.low - shift, 0.0), upper),
        )  # fmt: skip
        table.over_time(
            "spread_rate",
            spread_rate(moments.variance, self.times),
            f"1/{study.clock.unit}",
            "half the log growth rate of the variance",
        )
        self._drivers(table)
        self._linear(table, held)
        self._separation(table, held)
        self._arcs(table)
        self._tell_endings(table)
        return table

    def checked(self, spread: FloatArray) -> HeldOut:
        """The check's members as quantities, directly and by the chain."""
        parameters = self.horizon.germ.parameters(self.chain.check_nodes)
        direct = self.of_values(self.chain.direct, parameters)
        predicted = self.of_values(self.chain.predicted, parameters)
        return HeldOut(self.times, direct, predicted, spread)

    def path_error(self) -> float:
        """Largest held-out path error over the spread, over quantities and output times."""
        error = self.checked(self._spread()).error
        return float(np.nanmax(np.where(np.isfinite(error), error, np.nan), initial=0.0))

    def _first_block(self) -> FloatArray:
        """Quantities (n, T, Q) of the ensemble's first members."""
        count = min(self.horizon.study.ensemble.members, BLOCK)
        return self.members(self.horizon.history, self.horizon.streams("a"), 0, count, direct=True)

    def _spread(self) -> FloatArray:
        """(T, Q) standard deviations of the first members, to read the trust horizon from."""
        values = self._first_block()
        known = np.isfinite(values)
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.where(known, values, 0.0).sum(axis=0) / known.sum(axis=0)
            away = np.where(known, values - mean, 0.0)
            return np.asarray(np.sqrt((away**2).sum(axis=0) / known.sum(axis=0)))

    def _drivers(self, table: ResultTable) -> None:
        """Pick and freeze: each group in turn drawn from an independent ensemble."""
        horizon = self.horizon
        history, other = horizon.history, horizon.history.restreamed("b")
        own, foreign = horizon.streams("a"), horizon.streams("b")
        shares = PickFreezeAccumulator([g.name for g in self.groups])
        names = ("start", *horizon.germ.parameter_names)
        sources = [s.name for s in horizon.germ.noise.sources]

        def seen(
            history: NoiseHistory, streams: tuple[str, ...], block: int, count: int
        ) -> tuple[FloatArray, FloatArray]:
            values = self.members(history, streams, block, count)
            return values, self.ended

        def mixed(block: int, count: int) -> Iterator[tuple[FloatArray, FloatArray]]:
            for group in self.groups:
                if group.kind == "noise":
                    swapped = history.with_stream(sources.index(group.name), "b")
                    yield seen(swapped, own, block, count)
                else:
                    streams = tuple("b" if name == group.name else "a" for name in names)
                    yield seen(history, streams, block, count)

        exits = ExitDrivers(horizon.study, [g.name for g in self.groups])
        for block, count in blocks_of(min(horizon.study.ensemble.members, 40_000)):
            a, b = seen(history, own, block, count), seen(other, foreign, block, count)
            swapped = list(mixed(block, count))
            shares.update(a[0], b[0], [values for values, _ in swapped])
            if exits.boxes:
                exits.update(a, b, swapped)
        if exits.boxes:
            exits.add_to(table)
        result = shares.result()
        table.by_driver(
            "driver_first", result.first, "first-order share of the variance", result.first_interval
        )
        table.by_driver(
            "driver_total", result.total, "total share of the variance", result.total_interval
        )

    def _cloud(self, table: ResultTable) -> None:
        """Some members in the chart's own components, at some times."""
        table.add(
            "cloud_chart",
            ("cloud_member", "component", "cloud_time"),
            np.swapaxes(self.cloud, 1, 2),
            "as the component",
            "members of the ensemble in the chart in which they are expanded",
        )
        names = list(self.horizon.chart.components)
        table.variables["component"] = (("component",), names, {"units": ""})

    def _linear(self, table: ResultTable, check: HeldOut) -> None:
        """Share of the variance beyond degree one; which frequencies of noise drive the rest."""
        horizon, linear = self.horizon, ChainLinear(self.horizon, self.chain)
        streams = horizon.streams("a")
        part = linear.fit(
            lambda block, n: self.members(horizon.history, streams, block, n, onward=True)
        )
        share = np.full((self.times.size, len(self.quantities.names)), np.nan)
        if part is not None:
            share = part.share_beyond
            trust = check.trust_horizon(table.study.tolerance)
            add_bands(table, linear.responses(part), trust, check.rms)
        table.over_time("nonlinear_share", share, "1", "share of variance beyond degree one")

    def _separation(self, table: ResultTable, check: HeldOut) -> None:
        """How fast neighbouring motions move apart."""
        if (found := chain_logs(self.horizon, self.chain)) is not None:
            add_exponents(table, *found, worst_error(check))

    def _tell_endings(self, table: ResultTable) -> None:
        """P(ended by t); the runs that tell of it are few, and widen the probabilities."""
        seen = self.chain.endings
        if not seen.ended:
            return
        ended = np.concatenate(self.all_ended)
        share = np.mean(self.times >= ended[:, None], axis=0)
        # a rate that n endings tell is known to 1 / sqrt(n) of itself
        error = normal_factor() * share / np.sqrt(seen.ended)
        beyond, some = self.times > self.chain.reached, self.chain.continued
        if beyond.any():  # nobody else was followed there
            share[beyond] = error[beyond] = np.nan
        if beyond.any() and some is not None:
            share[beyond] = np.mean(self.times[beyond] >= some.ended[:, None], axis=0)
            ends = wilson(share[beyond], np.full(int(beyond.sum()), float(some.ended.size)))
            error[beyond] = np.maximum(share[beyond] - ends.low, ends.high - share[beyond])
        add_ended(table, share, Interval(share - error, share + error))
        table.notes.append(
            f"{seen.ended} of {seen.runs} runs of arcs ended early for a physical reason. Which"
            " members of the ensemble do so is told by a logistic regression on how far they go;"
            " they count as having left. Means, spreads and drivers speak of motion that goes on."
        )
        truly, told = np.isfinite(self.chain.check_ended)
        table.notes.append(
            f"{truly.sum()} of the check's {truly.size} members ended in direct runs,"
            f" {told.sum()} by the arcs; of {(truly != told).sum()} the two disagree whether they"
            " end."
        )

    def _arcs(self, table: ResultTable) -> None:
        records = self.chain.records
        unit = table.study.clock.unit
        for name, units, words in (
            ("start", unit, "start of the arc"),
            ("end", unit, "end of the arc"),
            ("degree", "1", "degree of the arc's expansion"),
            ("terms", "1", "terms of the arc's expansion"),
            ("runs", "1", "runs of the arc's design"),
            ("failed", "1", "of them failed"),
            ("direct", "1", "members of the arc's pool that were run directly, being far outside"),
            ("error", "1", "held-out error at the arc's end over the spread there"),
            ("allowed", "1", "held-out error that the arc might have"),
            ("note", "", "why the arc is as it is"),
        ):
            values = [getattr(r, name) for r in records]
            table.add(f"arc_{name}", ("arc",), values, units, words)
        norms = [_norms(arc) for arc in self.chain.maps]
        # an arc at which the chain stopped has a record, and no map
        add_degree_norms(table, norms + [np.empty(0)] * (len(records) - len(norms)))
        add_noise_bases(table, [arc.noise for arc in self.chain.maps])


def _norms(arc: ArcMap) -> FloatArray:
    """Norms by degree of an arc's coefficients at its end."""
    degrees = arc.basis.indices.sum(axis=1)
    last = arc.coefficients.reshape(degrees.size, arc.times.size, -1)[:, -1]
    return degree_norms(last, degrees)
