"""Cells, noise histories and members: what the arcs of a chain have in common."""

from __future__ import annotations

import hashlib
import math
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.chain import ticks
from nipc.chain.arc import ArcMap
from nipc.chain.history import BLOCK, NoiseHistory, blocks_of
from nipc.chain.noise_terms import NoiseTerms
from nipc.chain.ticks import TICKS
from nipc.problem.charts import Chart
from nipc.problem.germ import Germ
from nipc.problem.noise import NoiseModel
from nipc.problem.study import Study
from nipc.problem.units import chart_time_scale
from nipc.runs.engine import Engine
from nipc.runs.outcomes import Outcomes
from nipc.runs.propagator import Batch


@dataclass(frozen=True, eq=False)
class Members:
    """Where members stand at an arc's start.

    values (n, d) in the chart; carried (n, G) Gauss-Markov values over their stationary deviation;
    law (n, P') uncertain parameters; parameters (n, P) all of them; `lost` (n,) are those that were
    far outside an arc's design and were not run: they move on, but where they are is a guess;
    `ended` (n,) is when one ended for a physical reason, NaN where it did not.
    """

    values: FloatArray
    carried: FloatArray
    law: FloatArray
    parameters: FloatArray
    lost: BoolArray
    ended: FloatArray

    @property
    def open(self) -> BoolArray:
        """(n,) neither lost nor ended: good for a design."""
        return ~self.lost & np.isnan(self.ended)

    @property
    def correlated(self) -> FloatArray:
        """(n, d + G + P'): what an arc's sampled basis is in."""
        return np.hstack([self.values, self.carried, self.law])

    def take(self, rows: IntArray) -> Members:
        return Members(
            self.values[rows], self.carried[rows], self.law[rows], self.parameters[rows],
            self.lost[rows], self.ended[rows],
        )  # fmt: skip


class Horizon:
    """The cells of a horizon, the noise histories on them, and members moving through arcs.

    An arc is told by its first and last tick (see `nipc.chain.ticks`); `terms` may be replaced by
    what a pilot has shown, once the first arc is built.
    """

    def __init__(self, study: Study, engine: Engine, germ: Germ, chart: Chart) -> None:
        self.study, self.engine, self.germ, self.chart = study, engine, germ, chart
        units = [c.unit for c in study.state]
        self.chart_time = chart_time_scale(study.clock.unit, units)
        self.outputs = study.clock.times
        self.cells = cell_count(study)
        self.terms = NoiseTerms.of(study, study.clock.length / self.cells)
        self.outcomes: list[Outcomes] = []
        self.cost = 0.0  # in run-equivalents: different runs, each by the share that it covers
        self._known: set[bytes] = set()
        self.edges = np.linspace(study.clock.start, study.clock.end, self.cells + 1)
        self.ticks = ticks.times(self.edges)
        self._snapped = ticks.snapped(self.outputs, self.ticks)
        sources = germ.noise.sources
        self.richness = study.check.richness
        most = max([self.richness * n for n in self.terms.piloted], default=1)
        self.history = NoiseHistory(
            study.seed, ("a",) * len(sources), sources, self.edges, most, np.ones(len(sources))
        )
        self.gauss_markov = [j for j, s in enumerate(sources) if s.carried]

    # -- members ---------------------------------------------------------------------------------

    def nodes(self, streams: tuple[str, ...], block: int, count: int) -> FloatArray:
        """Start and parameter variables (count, germ size) of members of a block and the next.

        `streams`: one name for the start and one for each parameter, so that each can be frozen
        or drawn anew on its own.
        """
        parts = [self._block_nodes(streams, block + b)[:part] for b, part in blocks_of(count)]
        return parts[0] if len(parts) == 1 else np.vstack(parts)

    def _block_nodes(self, streams: tuple[str, ...], block: int) -> FloatArray:
        result = np.empty((BLOCK, self.germ.size))
        result[:, self.germ.first_noise :] = 0.0
        labels = ("start", *self.germ.parameter_names)
        for i, (label, stream) in enumerate(zip(labels, streams, strict=True)):
            rng = np.random.default_rng([self.study.seed, block, *f"{label}:{stream}".encode()])
            drawn = self.germ.sample(rng, BLOCK)
            columns = (
                slice(0, self.germ.start.rank)
                if i == 0
                else slice(self.germ.first_parameter + i - 1, self.germ.first_parameter + i)
            )
            result[:, columns] = drawn[:, columns]
        return result

    def streams(self, name: str) -> tuple[str, ...]:
        """The same stream for the start and every parameter."""
        return (name,) * (1 + len(self.germ.parameter_names))

    def members_of(self, nodes: FloatArray, history: NoiseHistory, block: int) -> Members:
        count = nodes.shape[0]
        states = self.germ.states(nodes)
        values = self.chart.from_state(states, self.edges[0] * self.chart_time)
        mean = self.germ.start.mean[None]
        centre = self.chart.from_state(mean, self.edges[0] * self.chart_time)
        values = self.chart.unwrap(values[:, None], None, centre[0])[:, 0]
        carried = np.empty((count, len(self.gauss_markov)))
        for i, j in enumerate(self.gauss_markov):
            carried[:, i] = history.initial(j, block, count) * history.scales[j]
        span = slice(self.germ.first_parameter, self.germ.first_noise)
        lost = np.zeros(count, dtype=bool)
        parameters, never = self.germ.parameters(nodes), np.full(count, np.nan)
        return Members(values, carried, nodes[:, span], parameters, lost, never)

    @property
    def end(self) -> int:
        """The horizon's last tick."""
        return self.cells * TICKS

    def share(self, first: int, last: int) -> float:
        """Length of the arc from tick first to tick last over the horizon's."""
        return float((self.ticks[last] - self.ticks[first]) / (self.ticks[-1] - self.ticks[0]))

    def model(
        self, first: int, last: int, richness: int = 1, terms: tuple[int, ...] | None = None
    ) -> NoiseModel:
        """The noise on the arc of ticks first ... last."""
        terms = self.terms.at((last - first) / TICKS) if terms is None else terms
        bases = tuple(
            n.expanded_on(richness * k) for n, k in zip(self.study.noise, terms, strict=True)
        )
        sources = self.germ.noise.sources
        return NoiseModel(sources, bases, float(self.ticks[first]), float(self.ticks[last]))

    def multiplies(self, model: NoiseModel) -> BoolArray:
        """(K,) whether a white coefficient belongs to a source that multiplies the state."""
        flags = [n.enters == "multiplicative" for n in self.study.noise]
        return np.repeat(np.array(flags, bool), [b.terms for b in model.bases])

    def fresh(
        self, model: NoiseModel, history: NoiseHistory, first: int, last: int, block: int, n: int
    ) -> FloatArray:
        """White coefficients (n, K) of the members on an arc, without the carried values."""
        parts = [
            history.white(j, basis, first, last, block, n) for j, basis in enumerate(model.bases)
        ]
        return np.hstack(parts) if parts else np.empty((n, 0))

    def forcing_columns(
        self, model: NoiseModel, carried: FloatArray, white: FloatArray
    ) -> FloatArray:
        """Coefficients (n, model.size) in the model's own order: carried value, then its noise."""
        parts, column, held = [], 0, 0
        for source, basis in zip(model.sources, model.bases, strict=True):
            if source.carried:
                parts.append(carried[:, held : held + 1])
                held += 1
            parts.append(white[:, column : column + basis.terms])
            column += basis.terms
        return np.hstack(parts) if parts else np.empty((white.shape[0], 0))

    def arc_times(self, first: int, last: int) -> FloatArray:
        """Output times within (start, end] of an arc, and its end."""
        start, end = self.ticks[first], self.ticks[last]
        inner = self._snapped[(self._snapped > start) & (self._snapped < end)]
        return np.append(inner, end)

    def rows_between(self, first: int, last: int) -> IntArray:
        """Output times in (start, end] of the arc of ticks first ... last."""
        inside = (self._snapped > self.ticks[first]) & (self._snapped <= self.ticks[last])
        return np.flatnonzero(inside)

    def places(self, times: FloatArray, rows: IntArray) -> IntArray:
        """Where output times `rows` stand among an arc's own times."""
        return np.searchsorted(times, self._snapped[rows])

    def output_rows(self, arc: ArcMap) -> IntArray:
        """Output times that an arc holds."""
        return self.rows_between(arc.first, arc.last)

    def inner_times(self, arc: ArcMap) -> IntArray:
        """Which of the arc's own times are output times."""
        return self.places(arc.times, self.output_rows(arc))

    def run(
        self,
        members: Members,
        model: NoiseModel,
        white: FloatArray,
        times: FloatArray,
        label: str,
        lenient: bool = False,
    ) -> tuple[FloatArray, BoolArray]:
        """Chart values (n, m, d) at the arc's times by direct runs, and which are usable (n,).

        When `lenient`, all of them may fail. Members without a finite state, whose run of an
        earlier arc failed or ended, are not run.
        """
        return self.run_to_end(members, model, white, times, label, lenient)[:2]

    def run_to_end(
        self,
        members: Members,
        model: NoiseModel,
        white: FloatArray,
        times: FloatArray,
        label: str,
        lenient: bool = False,
    ) -> tuple[FloatArray, BoolArray, FloatArray]:
        """The same, and when runs ended for a physical reason (n,): NaN where they did not."""
        count = members.values.shape[0]
        values = np.full((count, times.size, members.values.shape[1]), np.nan)
        good, ended = np.zeros(count, dtype=bool), np.full(count, np.nan)
        rows = np.flatnonzero(np.isfinite(members.values).all(axis=1))
        if not rows.size:
            return values, good, ended
        members, white = members.take(rows), white[rows]
        grid = np.concatenate([[model.start], times])
        states = self.chart.to_state(members.values, model.start * self.chart_time)
        forcing = model.realise(self.forcing_columns(model, members.carried, white))
        batch = Batch(states, grid, forcing, members.parameters)
        new = self._new(batch)
        policy = self.engine.policy
        self.engine.policy = replace(policy, tolerated=1.0) if lenient else policy
        try:
            outcomes = self.engine.run(batch, label)
        finally:
            self.engine.policy = policy
        self.outcomes.append(outcomes.account(new))
        with np.errstate(invalid="ignore"):
            found = self.chart.from_state(outcomes.states, grid * self.chart_time)
        whole = np.isfinite(found).all(axis=(1, 2))
        found[whole] = self.chart.unwrap(
            found[whole], grid * self.chart_time, members.values[whole]
        )
        values[rows], good[rows], ended[rows] = found[:, 1:], whole, outcomes.ended
        return values, good, ended

    def _new(self, batch: Batch) -> IntArray:
        """The runs that this chain has not asked for before; they are added to the cost."""
        common = batch.forcing.digest() + batch.times.tobytes()
        share = (batch.times[-1] - batch.times[0]) / self.study.clock.length
        columns = (batch.states, batch.forcing.coefficients, batch.parameters)
        new = []
        for place, row in enumerate(np.hstack(columns)):
            key = hashlib.blake2b(common + row.tobytes(), digest_size=16).digest()
            if key not in self._known:
                self._known.add(key)
                new.append(place)
        self.cost += float(share) * len(new)
        return np.array(new, dtype=np.int64)

    def advance(
        self,
        arc: ArcMap,
        members: Members,
        history: NoiseHistory,
        block: int,
        direct: float = 0.0,
    ) -> tuple[FloatArray, Members]:
        """Members through an arc: chart values (n, m, d), and where they then stand.

        The farthest outside the arc's design, at most `direct` of them, are run by the propagator
        itself; the others that are far are lost.
        """
        n = members.values.shape[0]
        white = self.fresh(arc.noise, history, arc.first, arc.last, block, n)
        values, outside = arc(np.hstack([members.correlated, white]))
        far = (outside > 1.0) & members.open
        ended = self._endings(arc, members, values, history.uniform(arc.first, block, n))
        count = min(int(direct), int(far.sum()))
        if count:
            rows = np.sort(np.argsort(np.where(far, -outside, 0.0), kind="stable")[:count])
            label = f"members far outside, t = {arc.start:g} to {arc.times[-1]:g}"
            some = members.take(rows)
            found, good, ended[rows] = self.run_to_end(
                some, arc.noise, white[rows], arc.times, label, True
            )
            values[rows[good]] = found[good]
            far[rows[good]] = False
        carried = self.carry(members.carried, history, arc.first, arc.last, block)
        lost = members.lost | far
        return values, Members(values[:, -1], carried, members.law, members.parameters, lost, ended)

    def _endings(
        self, arc: ArcMap, members: Members, values: FloatArray, uniform: FloatArray
    ) -> FloatArray:
        """When members have ended (n,), within this arc or before."""
        if arc.endings is None:
            return members.ended.copy()
        times = np.concatenate([[arc.start], arc.times])
        when = arc.endings.times(members.values, values, times, uniform, arc.first == 0)
        return np.where(np.isnan(members.ended), when, members.ended)

    def granted(self, arc: ArcMap, block: int) -> int:
        """Direct runs that a block of the ensemble gets of those for all of it."""
        each = arc.direct_runs * BLOCK / max(self.study.ensemble.members, BLOCK)
        return math.floor(each * (block + 1)) - math.floor(each * block)

    def carry(
        self, carried: FloatArray, history: NoiseHistory, first: int, last: int, block: int
    ) -> FloatArray:
        """Gauss-Markov values (n, G) at the end of the arc of ticks first ... last."""
        after = np.empty_like(carried)
        for i, j in enumerate(self.gauss_markov):
            after[:, i] = history.carry(j, carried[:, i], first, last, block)
        return after


def cell_count(study: Study) -> int:
    """The number of cells: the study's arcs, or where they are "auto" one each half period.

    Without a period 32, from which arcs are lengthened and shortened as they need.
    """
    if isinstance(study.chain.arcs, int):
        return study.chain.arcs
    if study.clock.period is None:
        return 32
    return max(1, math.ceil(2.0 * study.clock.length / study.clock.period))
