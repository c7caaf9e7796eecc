"""Cells, noise histories and members: what the arcs of a chain have in common."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import BoolArray, FloatArray, IntArray
from nipc.chain.arc import ArcMap
from nipc.chain.history import BLOCK, NoiseHistory
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
    law (n, P') uncertain parameters; parameters (n, P) all of them.
    """

    values: FloatArray
    carried: FloatArray
    law: FloatArray
    parameters: FloatArray

    @property
    def correlated(self) -> FloatArray:
        """(n, d + G + P'): what an arc's sampled basis is in."""
        return np.hstack([self.values, self.carried, self.law])

    def take(self, rows: IntArray) -> Members:
        return Members(self.values[rows], self.carried[rows], self.law[rows], self.parameters[rows])


class Horizon:
    """The cells of a horizon, the noise histories on them, and members moving through arcs."""

    def __init__(
        self, study: Study, engine: Engine, germ: Germ, chart: Chart, terms: tuple[int, ...]
    ) -> None:
        self.study, self.engine, self.germ, self.chart = study, engine, germ, chart
        self.terms = terms
        units = [c.unit for c in study.state]
        self.chart_time = chart_time_scale(study.clock.unit, units)
        self.outputs = study.clock.times
        self.cells = cell_count(study)
        self.outcomes: list[Outcomes] = []
        self.edges = np.linspace(study.clock.start, study.clock.end, self.cells + 1)
        sources = germ.noise.sources
        self.richness = study.check.richness
        most = max([self.richness * n for n in terms], default=1)
        self.history = NoiseHistory(
            study.seed, ("a",) * len(sources), sources, self.edges, most, np.ones(len(sources))
        )
        self.gauss_markov = [j for j, s in enumerate(sources) if s.carried]

    # -- members ---------------------------------------------------------------------------------

    def nodes(self, streams: tuple[str, ...], block: int, count: int) -> FloatArray:
        """Start and parameter variables (count, germ size) of members of a block.

        `streams`: one name for the start and one for each parameter, so that each can be frozen
        or drawn anew on its own.
        """
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
        return result[:count]

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
        return Members(values, carried, nodes[:, span], self.germ.parameters(nodes))

    def model(self, first: int, last: int, richness: int = 1) -> NoiseModel:
        """The noise on cells first ... last - 1."""
        bases = tuple(
            n.expanded_on(richness * k) for n, k in zip(self.study.noise, self.terms, strict=True)
        )
        sources = self.germ.noise.sources
        return NoiseModel(sources, bases, self.edges[first], self.edges[last])

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
        start, end = self.edges[first], self.edges[last]
        inner = self.outputs[(self.outputs > start) & (self.outputs < end)]
        return np.append(inner, end)

    def output_rows(self, arc: ArcMap) -> IntArray:
        """Output times that an arc holds: those in (start, end]."""
        inside = (self.outputs > arc.start) & (self.outputs <= arc.times[-1])
        return np.flatnonzero(inside)

    def inner_times(self, arc: ArcMap) -> IntArray:
        """Which of the arc's own times are output times."""
        rows = self.output_rows(arc)
        return np.searchsorted(arc.times, self.outputs[rows])

    def run(
        self, members: Members, model: NoiseModel, white: FloatArray, times: FloatArray, label: str
    ) -> tuple[FloatArray, BoolArray]:
        """Chart values (n, m, d) at the arc's times by direct runs, and which are usable (n,)."""
        start = model.start
        grid = np.concatenate([[start], times])
        states = self.chart.to_state(members.values, start * self.chart_time)
        forcing = model.realise(self.forcing_columns(model, members.carried, white))
        outcomes = self.engine.run(Batch(states, grid, forcing, members.parameters), label)
        self.outcomes.append(replace(outcomes, states=outcomes.states[:, :0]))
        with np.errstate(invalid="ignore"):
            values = self.chart.from_state(outcomes.states, grid * self.chart_time)
        good: BoolArray = np.asarray(np.isfinite(values).all(axis=(1, 2)))
        values[good] = self.chart.unwrap(values[good], grid * self.chart_time, members.values[good])
        return values[:, 1:], good

    def advance(
        self,
        arc: ArcMap,
        members: Members,
        history: NoiseHistory,
        block: int,
    ) -> tuple[FloatArray, Members, int]:
        """Members through an arc: chart values (n, m, d), where they then stand, how many far."""
        n = members.values.shape[0]
        white = self.fresh(arc.noise, history, arc.first, arc.last, block, n)
        values, far = arc(np.hstack([members.correlated, white]))
        carried = np.empty_like(members.carried)
        for i, j in enumerate(self.gauss_markov):
            carried[:, i] = history.carry(j, members.carried[:, i], arc.first, arc.last, block)
        after = Members(values[:, -1], carried, members.law, members.parameters)
        return values, after, int(far.sum())


def cell_count(study: Study) -> int:
    """The study's number of arcs; "auto" is half a period an arc, or 32 without a period."""
    if isinstance(study.chain.arcs, int):
        return study.chain.arcs
    if study.clock.period is None:
        return 32
    return max(1, math.ceil(2.0 * study.clock.length / study.clock.period))
