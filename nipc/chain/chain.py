"""Arc by arc: expansions of successive arcs, built on a pool of members, checked as they grow."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.arc import ArcBasis, ArcMap
from nipc.chain.horizon import Horizon, Members
from nipc.errors import FitError
from nipc.expansion import TensorBasis, christoffel_weights, least_squares, near_optimal_subset

POOL = 4096
USELESS = 0.5  # a held-out error of half the spread: the arc's polynomial says nothing
GUESS = 0.3  # relative size of a noise variable before any arc has told it


@dataclass(frozen=True)
class ArcRecord:
    """Why an arc is as it is. `error` is held out, at the arc's end, over the spread there."""

    start: float
    end: float
    degree: int
    terms: int
    runs: int
    error: float
    note: str


@dataclass(frozen=True, eq=False)
class Chain:
    """The arcs up to `reached`, and the check's members at all output times.

    direct, predicted (C, T, d) are chart values, NaN beyond what was reached; `cost` is in
    run-equivalents: runs times the share of the horizon that each covers.
    """

    maps: tuple[ArcMap, ...]
    records: tuple[ArcRecord, ...]
    direct: FloatArray
    predicted: FloatArray
    check_nodes: FloatArray
    cost: float
    reached: float
    notes: tuple[str, ...]


@dataclass
class _Arc:
    """One arc under construction: its nodes and runs only ever grow."""

    first: int
    last: int
    pool: FloatArray
    nodes: FloatArray
    outputs: FloatArray
    runs: int = 0
    tried: list[tuple[int, float]] = field(default_factory=list)


class ChainBuilder:
    """Builds the arcs of a study one after the other.

    The pool (the ensemble's first block) gives each arc its basis and the candidates of its
    design. The check's members are run directly through every arc; they are each arc's held-out
    runs too: their states are true ones, their noise paths richer than the expansion sees.
    """

    def __init__(self, horizon: Horizon) -> None:
        self.horizon = horizon
        self.study = study = horizon.study
        self.tolerance = study.chain.arc_tolerance or study.tolerance / math.sqrt(horizon.cells)
        self.checked = horizon.history.restreamed("check")
        asked = study.chain.state_degree
        self.fixed = asked if isinstance(asked, int) else None
        self.degree = self.fixed or 1
        self.sizes: FloatArray | None = None

    def tightened(self, factor: float) -> ChainBuilder:
        """A builder whose arcs must agree `factor` times better."""
        other = ChainBuilder(self.horizon)
        other.tolerance = self.tolerance * factor
        return other

    def build(self, before: Chain | None = None) -> Chain:
        """All arcs, or those up to where the polynomials fail.

        Arcs of a chain built `before` that keep this builder's tolerance are taken over as they
        are, and their runs are not made again.
        """
        horizon, study = self.horizon, self.study
        pool = horizon.members_of(horizon.nodes(horizon.streams("a"), 0, POOL), horizon.history, 0)
        nodes = horizon.nodes(horizon.streams("check"), 0, study.check.runs)
        direct = chained = horizon.members_of(nodes, self.checked, 0)
        shape = (study.check.runs, horizon.outputs.size, direct.values.shape[1])
        seen, predicted = np.full(shape, np.nan), np.full(shape, np.nan)
        at_start = horizon.outputs <= study.clock.start
        seen[:, at_start] = predicted[:, at_start] = direct.values[:, None]
        maps: list[ArcMap] = []
        records: list[ArcRecord] = []
        notes: list[str] = []
        cost = 0.0 if before is None else before.cost
        for first in range(horizon.cells):
            arc, record, values, spent = self._arc_or_kept(first, pool, direct, before)
            cost += spent * (record.end - record.start) / study.clock.length
            records.append(record)
            if arc is None:
                notes.append(
                    f"The chain stops at t = {record.start:g} {study.clock.unit}: {record.note}."
                )
                break
            maps.append(arc)
            rows = horizon.output_rows(arc)
            inside = horizon.inner_times(arc)
            _, pool, _ = horizon.advance(arc, pool, horizon.history, 0)
            steps, chained, _ = horizon.advance(arc, chained, self.checked, 0)
            seen[:, rows] = values[:, inside]
            predicted[:, rows] = steps[:, inside]
            direct = replace(
                direct,
                values=values[:, -1],
                carried=chained.carried,
            )
        reached = maps[-1].times[-1] if maps else study.clock.start
        return Chain(
            tuple(maps), tuple(records), seen, predicted, nodes, cost, float(reached),
            tuple(notes),
        )  # fmt: skip

    def _arc_or_kept(
        self, first: int, pool: Members, direct: Members, before: Chain | None
    ) -> tuple[ArcMap | None, ArcRecord, FloatArray, int]:
        kept = before is not None and first < len(before.maps)
        if before is None or not kept or before.records[first].error > self.tolerance:
            if before is not None and kept:
                self.degree = max(self.degree, before.records[first].degree)
            return self._arc(first, first + 1, pool, direct)
        arc, record = before.maps[first], before.records[first]
        rich = self.horizon.model(first, first + 1, self.study.check.richness)
        count = direct.values.shape[0]
        white = self.horizon.fresh(rich, self.checked, first, first + 1, 0, count)
        label = f"arc {first + 1} of {self.horizon.cells}, check"
        truth, _ = self.horizon.run(direct, rich, white, arc.times, label)
        self.degree, self.sizes = arc.degree, None
        return arc, record, truth, 0

    # -- one arc ---------------------------------------------------------------------------------

    def _arc(
        self, first: int, last: int, pool: Members, direct: Members
    ) -> tuple[ArcMap | None, ArcRecord, FloatArray, int]:
        """Raise the degree until the held-out runs agree; the map, why, held-out values, runs."""
        horizon, study = self.horizon, self.study
        model = horizon.model(first, last)
        rich = horizon.model(first, last, study.check.richness)
        times = horizon.arc_times(first, last)
        count = direct.values.shape[0]
        held_white = horizon.fresh(rich, self.checked, first, last, 0, count)
        label = f"arc {first + 1} of {horizon.cells}"
        truth, good = horizon.run(direct, rich, held_white, times, f"{label}, check")
        white = horizon.fresh(model, horizon.history, first, last, 0, pool.values.shape[0])
        held = np.hstack(
            [direct.correlated, horizon.fresh(model, self.checked, first, last, 0, count)]
        )
        candidates = np.hstack([pool.correlated, white])
        state = _Arc(
            first, last, candidates, np.empty((0, candidates.shape[1])),
            np.empty((0, times.size * truth.shape[2])),
        )  # fmt: skip
        note, best = "", None
        degree = self.degree
        while True:
            sizes = np.full(white.shape[1], GUESS) if self.sizes is None else self.sizes
            # noise that multiplies the state may have no linear effect, and yet matter
            sizes = np.where(horizon.multiplies(model), 1.0, sizes)
            basis = ArcBasis.of(pool.correlated, sizes, max(degree, 1), study.chain.noise_degree)
            self._extend(state, basis.full, pool, model, times, label)
            arc, spread = self._fit(state, basis.full, model, times, degree)
            error = self._error(arc, held[good], truth[good], spread)
            lower = self._lower_error(state, basis, arc, held[good], truth[good], spread)
            self.sizes = arc.sizes(spread)
            state.tried.append((degree, error))
            if best is None or error < best[1]:
                best = (arc, error)
            if error <= self.tolerance or self.fixed is not None:
                break
            if degree >= study.chain.largest_degree:
                note = "the largest degree is not enough"
                break
            if len(state.tried) > 1 and error > 0.7 * state.tried[-2][1]:
                note = "a higher degree brings nothing: the noise terms set the error"
                break
            degree += 1
        arc, error = best
        record = ArcRecord(
            float(horizon.edges[first]), float(horizon.edges[last]), arc.degree,
            arc.basis.n_terms, state.runs, error, note,
        )  # fmt: skip
        if self.fixed is None:
            easy = arc.degree > 1 and lower <= 0.5 * self.tolerance
            self.degree = arc.degree - 1 if easy else arc.degree
        if not math.isfinite(error) or error > USELESS:
            record = replace(
                record, note=f"held-out runs of the arc miss by {error:.0%} of the spread"
            )
            return None, record, truth, state.runs + count
        return arc, record, truth, state.runs + count

    def _extend(
        self,
        state: _Arc,
        basis: TensorBasis,
        pool: Members,
        model: object,
        times: FloatArray,
        label: str,
    ) -> None:
        """Add nodes, chosen beside those that are there, and run them."""
        from nipc.problem.noise import NoiseModel

        assert isinstance(model, NoiseModel)
        wanted = (
            max(math.ceil(self.study.chain.oversampling * basis.n_terms), basis.n_terms + 4)
            - state.nodes.shape[0]
        )
        if wanted <= 0:
            return
        rng = np.random.default_rng([self.study.seed, state.first, state.last, state.runs])
        taken = state.nodes if state.nodes.shape[0] else None
        subset = near_optimal_subset(basis, state.pool, wanted, rng, taken)
        width = pool.correlated.shape[1]
        members = pool.take(subset.rows)
        white = state.pool[subset.rows, width:]
        values, good = self.horizon.run(members, model, white, times, f"{label}, design")
        state.runs += wanted
        state.nodes = np.vstack([state.nodes, state.pool[subset.rows][good]])
        state.outputs = np.vstack([state.outputs, values[good].reshape(int(good.sum()), -1)])

    def _fit(
        self, state: _Arc, basis: TensorBasis, model: object, times: FloatArray, degree: int
    ) -> tuple[ArcMap, FloatArray]:
        from nipc.problem.noise import NoiseModel

        assert isinstance(model, NoiseModel)
        matrix = basis.evaluate(state.nodes)
        if matrix.shape[1] <= matrix.shape[0]:
            raise FitError(
                f"arc {state.first + 1}: {matrix.shape[1]} of its {state.runs} runs can be used, "
                f"and its expansion has {matrix.shape[0]} terms"
            )
        fit = least_squares(matrix, state.outputs, christoffel_weights(matrix))
        components = state.outputs.shape[1] // times.size
        reach = float(np.max(np.einsum("tn,tn->n", matrix, matrix)))
        arc = ArcMap(
            state.first, state.last, float(model.start), times, model, basis,
            fit.coefficients, reach, degree, components,
        )  # fmt: skip
        shaped = fit.coefficients.reshape(matrix.shape[0], times.size, components)
        return arc, np.sqrt(np.sum(shaped[1:, -1] ** 2, axis=0))

    def _error(self, arc: ArcMap, held: FloatArray, truth: FloatArray, spread: FloatArray) -> float:
        """Largest over components of the held-out error at the arc's end over the spread."""
        if held.shape[0] == 0:
            return float("inf")
        gap = arc(held)[0][:, -1] - truth[:, -1]
        rms = np.sqrt(np.mean(gap**2, axis=0))
        size = np.max(np.abs(truth[:, -1]), axis=0)
        live = spread > 1e-12 * size
        return float(np.max(rms[live] / spread[live], initial=0.0))

    def _lower_error(
        self,
        state: _Arc,
        basis: ArcBasis,
        arc: ArcMap,
        held: FloatArray,
        truth: FloatArray,
        spread: FloatArray,
    ) -> float:
        """The same for one degree less on the same runs: it costs nothing to know."""
        if arc.degree <= 1:
            return float("inf")
        part = basis.up_to(arc.degree - 1)
        lower, _ = self._fit(state, part, arc.noise, arc.times, arc.degree - 1)
        return self._error(lower, held, truth, spread)
