"""One arc under construction: runs are only ever added, and fits judged by held-out runs."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.arc import ArcBasis, ArcMap
from nipc.chain.endings import Endings, EndingsSeen
from nipc.chain.grid_design import grid_of
from nipc.chain.history import BLOCK, NoiseHistory
from nipc.chain.horizon import Horizon, Members
from nipc.errors import FitError
from nipc.expansion import TensorBasis, christoffel_weights, least_squares, near_optimal_subset

REPLACED = 2  # times that failed runs of a design are replaced
GUESS = 0.3  # relative size of a noise variable before any arc has told it


@dataclass(frozen=True, eq=False)
class Trial:
    """An arc's expansion of one degree. Errors are held out, at the arc's end, over the spread.

    `lower` is the error with one degree less; `spread` (d,) the expansion's at the arc's end.
    """

    map: ArcMap
    error: float
    lower: float
    spread: FloatArray

    @property
    def degree(self) -> int:
        return self.map.degree


class ArcFit:
    """Design, runs and fits of the arc of ticks first ... last.

    `pool` gives the basis its law (by its first members) and the design its candidates; the `held`
    members, true states at the arc's start, are run directly with noise from `checked` and judge
    the fits.
    """

    def __init__(
        self,
        horizon: Horizon,
        first: int,
        last: int,
        pool: Members,
        held: Members,
        checked: NoiseHistory,
        terms: tuple[int, ...] | None = None,
    ) -> None:
        self.horizon, self.study = horizon, horizon.study
        self.first, self.last, self.pool = first, last, pool
        self.model = horizon.model(first, last, terms=terms)
        self.times = horizon.arc_times(first, last)
        start, end = horizon.ticks[first], horizon.ticks[last]
        self.label = f"t = {start:.6g} to {end:.6g} of {horizon.ticks[-1]:.6g}"
        white = horizon.fresh(self.model, horizon.history, first, last, 0, pool.values.shape[0])
        self.rows = np.flatnonzero(pool.open)
        self.candidates = np.hstack([pool.correlated, white])[self.rows]
        self.width = pool.correlated.shape[1]
        rich = horizon.model(first, last, self.study.check.richness, terms)
        count = held.values.shape[0]
        held_white = horizon.fresh(rich, checked, first, last, 0, count)
        self.truth, good, self.held_ended = horizon.run_to_end(
            held, rich, held_white, self.times, f"{self.label}, check"
        )
        seen = horizon.fresh(self.model, checked, first, last, 0, count)
        germ = np.hstack([held.correlated, seen])
        self._held = germ[good]
        self._known = self.truth[good, -1]
        self.nodes = np.empty((0, self.candidates.shape[1]))
        self.outputs = np.empty((0, self.times.size * self.truth.shape[2]))
        self._unusable = self.nodes
        self._ended = germ[np.isfinite(self.held_ended)]
        self.runs = self.failed = self.ended = 0

    def trial(self, degree: int, sizes: FloatArray | None) -> Trial:
        """Fit an expansion of this degree, after as many more runs as it needs.

        sizes (K,) are the noise variables' relative linear effects, as an earlier arc told them.
        """
        count = self.candidates.shape[1] - self.width
        if sizes is None or sizes.size != count:
            sizes = np.full(count, GUESS)
        # noise that multiplies the state may have no linear effect, and yet matter
        sizes = np.where(self.horizon.multiplies(self.model), 1.0, sizes)
        basis = ArcBasis.of(
            self.candidates[:BLOCK, : self.width],
            sizes,
            max(degree, 1),
            self.study.chain.noise_degree,
        )
        self._extend(basis.full)
        arc, spread = self._fit(basis.full, degree)
        lower = float("inf")
        if degree > 1:
            # one degree less on the same runs: it costs nothing to know
            lower = self._error(self._fit(basis.up_to(degree - 1), degree - 1)[0], spread)
        error = self._error(arc, spread)
        return Trial(replace(arc, error=error), error, lower, spread)

    def endings(self, arc: ArcMap, seen: EndingsSeen) -> Endings | None:
        """What the runs of this arc, and those of the arcs before it, tell of endings."""
        nodes = np.vstack([self.nodes, self._held, self._ended])
        ended = np.arange(nodes.shape[0]) >= nodes.shape[0] - self._ended.shape[0]
        width = self.truth.shape[2]
        seen.add((self.first, self.last), nodes[:, :width], arc(nodes)[0], ended)
        return seen.fitted()

    def _extend(self, basis: TensorBasis) -> None:
        """Add nodes, chosen beside those that are there, and run them.

        Where runs fail others near by take their place, twice over if need be.
        """
        needed = max(math.ceil(self.study.chain.oversampling * basis.n_terms), basis.n_terms + 4)
        for attempt in range(1 + REPLACED):
            missing = needed - self.nodes.shape[0]
            if missing <= 0:
                return
            rng = np.random.default_rng([self.study.seed, self.first, self.last, self.runs])
            taken = self.nodes if self.nodes.shape[0] else None
            members, candidates = self._offered(basis, missing, attempt)
            rows = near_optimal_subset(basis, candidates, missing, rng, taken).rows
            nodes, some = candidates[rows], members.take(rows)
            values, good, ended = self.horizon.run_to_end(
                some, self.model, nodes[:, self.width :], self.times, f"{self.label}, design",
                lenient=attempt > 0,
            )  # fmt: skip
            self.runs += missing
            self.failed += int((~good & np.isnan(ended)).sum())
            self.ended += int(np.isfinite(ended).sum())
            self._ended = np.vstack([self._ended, nodes[np.isfinite(ended)]])
            self.nodes = np.vstack([self.nodes, nodes[good]])
            self.outputs = np.vstack(
                [self.outputs, values[good].reshape(int(good.sum()), self.outputs.shape[1])]
            )
            self._unusable = np.vstack([self._unusable, nodes[~good]])

    def _offered(self, basis: TensorBasis, wanted: int, attempt: int) -> tuple[Members, FloatArray]:
        """Members and candidate nodes: a sparse grid's where the study asks, or the pool's."""
        if self.study.design.kind == "sparse-grid" and attempt == 0:
            level = max(1, int(basis.indices.sum(axis=1).max()))
            grid = grid_of(self.pool, self.candidates.shape[1] - self.width, level)
            if grid is not None and grid.candidates.shape[0] >= wanted:
                return grid
        if not self._unusable.shape[0]:
            return self.pool.take(self.rows), self.candidates
        # the same node would fail again
        failed = {row.tobytes() for row in self._unusable}
        kept = np.array([row.tobytes() not in failed for row in self.candidates])
        return self.pool.take(self.rows[kept]), self.candidates[kept]

    def _fit(self, basis: TensorBasis, degree: int) -> tuple[ArcMap, FloatArray]:
        matrix = basis.evaluate(self.nodes)
        if matrix.shape[1] <= matrix.shape[0]:
            raise FitError(
                f"{self.label}: {matrix.shape[1]} of the arc's {self.runs} runs can be used, "
                f"and its expansion has {matrix.shape[0]} terms"
            )
        fit = least_squares(matrix, self.outputs, christoffel_weights(matrix))
        components = self.truth.shape[2]
        ran = self.outputs.reshape(-1, self.times.size, components)
        low, high = ran.min(axis=0), ran.max(axis=0)
        slack = 2.0 * (high - low)
        arc = ArcMap(
            self.first, self.last, float(self.model.start), self.times, self.model, basis,
            fit.coefficients, low - slack, high + slack, degree, components,
        )  # fmt: skip
        shaped = fit.coefficients.reshape(matrix.shape[0], self.times.size, components)
        return arc, np.sqrt(np.sum(shaped[1:, -1] ** 2, axis=0))

    def _error(self, arc: ArcMap, spread: FloatArray) -> float:
        """Largest over components of the held-out error at the arc's end over the spread."""
        if self._held.shape[0] == 0:
            return float("inf")
        gap = arc(self._held)[0][:, -1] - self._known
        rms = np.sqrt(np.mean(gap**2, axis=0))
        size = np.max(np.abs(self._known), axis=0)
        live = spread > 1e-12 * size
        return float(np.max(rms[live] / spread[live], initial=0.0))
