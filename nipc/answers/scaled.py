"""A solved study asked at other strengths of its drivers: its members, each driver scaled.

The same members whatever the scales, so that answers at two of them differ by the scales alone.
"""

from __future__ import annotations

import copy
from abc import ABC, abstractmethod
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

import numpy as np

from nipc.answers import present
from nipc.answers.chained import ChainAnswers
from nipc.answers.confinement import Confinement
from nipc.answers.endings import endings_of
from nipc.answers.intervals import Interval, normal_factor, widen
from nipc.answers.scaled_expansion import scaled_expansion
from nipc.answers.scales import of_noise, scaled_germ, scaled_nodes
from nipc.arrays import BoolArray, FloatArray
from nipc.chain.arc import WRONG, ArcMap
from nipc.chain.check import HeldOut
from nipc.chain.history import BLOCK, blocks_of
from nipc.chain.single_arc import SingleArc, generator, run_times
from nipc.expansion import Expansion
from nipc.problem.germ import Group
from nipc.problem.quantities import QuantitySet
from nipc.problem.study import Study
from nipc.runs.engine import Engine
from nipc.runs.propagator import Batch

ALL = "all"


class Scaled(ABC):
    """Members of a solved study at scales (G,) of its groups, which are all ones as it stands.

    Of the members asked for last `outside` (n,) tells which passed outside what the runs cover,
    `far` their share, and `ended` (n,) when each ended early for a physical reason, NaN where it
    did not; None: none can. With a scale beyond one, members outside are held within what the
    others reach, if `holding`: an expansion carried far may send them anywhere.
    """

    room = 1.0
    """How far past the bounds of an arc's map members may go, where it has bounds."""
    holding = True

    def __init__(self, study: Study, groups: tuple[Group, ...], check: HeldOut) -> None:
        self.study, self.groups, self.check = study, groups, check
        self.times = study.clock.times
        self.outside: BoolArray = np.zeros(0, dtype=bool)
        self.far = 0.0
        self.ended: FloatArray | None = None
        self._times_ended: list[FloatArray] = []

    @property
    def names(self) -> tuple[str, ...]:
        """The groups' names."""
        return tuple(group.name for group in self.groups)

    @property
    def path_error(self) -> FloatArray:
        """(T, Q) root-mean-square error of a member's path as the study stands; NaN unchecked."""
        return self.check.rms

    @property
    def check_error(self) -> FloatArray:
        """(T, Q) root-mean-square error of a member's path over the check's own spread."""
        return replace(self.check, spread=present.std(self.check.direct)).error

    @property
    def polynomial_degree(self) -> int | None:
        """Degree of a member's value as a polynomial in the scales, where it is one."""
        return None

    def exact(self, scales: FloatArray) -> Expansion | None:
        """The expansion at these scales in closed form, where there is one."""
        return None

    @abstractmethod
    def members(
        self, scales: FloatArray, block: int, count: int, redrawn: str | None = None
    ) -> FloatArray:
        """Quantities (n, T, Q) of a block's first members; NaN beyond what the arcs reached.

        `redrawn` names a group whose variables are drawn anew, or says ALL.
        """

    @abstractmethod
    def direct(self, scales: FloatArray, count: int, label: str) -> FloatArray:
        """The first block's first members by direct runs, (n, T, Q); NaN where one failed."""

    def doubted(self, scales: FloatArray) -> BoolArray | None:
        """Which of the members asked for last may be elsewhere; None where no scale passes one."""
        return self.outside if np.max(scales, initial=0.0) > 1.0 else None

    def _note(self, outside: BoolArray) -> None:
        self.outside, self.far = outside, float(outside.mean())

    def _held(self, values: FloatArray, scales: FloatArray) -> FloatArray:
        if (
            not self.holding
            or np.max(scales, initial=0.0) <= 1.0
            or not self.outside.any()
            or self.outside.all()
        ):
            return values
        others = values[~self.outside]
        low = np.min(np.where(np.isnan(others), np.inf, others), axis=0)
        high = np.max(np.where(np.isnan(others), -np.inf, others), axis=0)
        values[self.outside] = np.clip(values[self.outside], low, high)
        return values

    def _endings_error(self, ended: FloatArray) -> FloatArray | None:
        """(T,) what the direct runs leave open of P(ended by t) with members' times of ending (n,).

        None where no run has ended.
        """
        return None

    def counted(self, result: Confinement) -> Confinement:
        """The probabilities, widened by what the direct runs leave open of who ends."""
        error = self._endings_error(np.concatenate(self._times_ended or [np.empty(0)]))
        if error is None:
            return result

        def wide(value: FloatArray, interval: Interval) -> Interval:
            low, high = widen(interval, value, error)
            return Interval(np.clip(low, 0.0, 1.0), np.clip(high, 0.0, 1.0))

        return replace(
            result,
            inside_interval=wide(result.inside, result.inside_interval),
            survival_interval=wide(result.survival, result.survival_interval),
        )

    def blocks(self, scales: FloatArray, count: int) -> Iterator[FloatArray]:
        """The ensemble's first members, block by block; afterwards `far` is of all of them."""
        far = 0.0
        self._times_ended = []
        for block, part in blocks_of(count):
            values = self.members(scales, block, part)
            if self.ended is not None:
                self._times_ended.append(self.ended)
            yield values
            far += self.far * part / count
        self.far = far


class ScaledArc(Scaled):
    """A single arc: a member's value is a polynomial in the scales, and moments have closed forms.

    A member is outside where the error at the end, carried outwards as in an arc of a chain
    (`nipc.chain.arc`), is feared to pass `WRONG` times the spread.
    """

    def __init__(self, arc: SingleArc, engine: Engine, quantities: QuantitySet) -> None:
        super().__init__(arc.study, arc.germ.groups(), arc.check)
        self.arc, self._engine, self._quantities = arc, engine, quantities
        self._endings = endings_of(arc)
        self._states: list[Mapping[str, Any]] = []  # of the generator, at the start of each block
        worst = np.fmax(arc.relative_error[-1], arc.check.error[-1])
        self._error = float(np.max(np.nan_to_num(worst), initial=0.0))

    @property
    def path_error(self) -> FloatArray:
        """The larger of the check's error and the leave-one-out error."""
        residual = self.arc.relative_error * self.arc.expansion.std
        return np.fmax(self.check.rms, residual)

    @property
    def polynomial_degree(self) -> int:
        return int(self.arc.expansion.basis.degrees.max(initial=0))

    def exact(self, scales: FloatArray) -> Expansion:
        factors = np.ones(self.arc.germ.size)
        for group, scale in zip(self.groups, scales, strict=True):
            factors[list(group.columns)] = scale
        return scaled_expansion(self.arc.expansion, factors)

    def members(
        self, scales: FloatArray, block: int, count: int, redrawn: str | None = None
    ) -> FloatArray:
        nodes = self._nodes(block, count)
        if redrawn is not None:
            germ = self.arc.germ
            other = germ.sample(generator(self.study, f"redrawn {block}"), BLOCK)[:count]
            for group in self.groups:
                if redrawn in (ALL, group.name):
                    nodes[:, group.columns] = other[:, group.columns]
        nodes = scaled_nodes(self.arc.germ, self.groups, scales, nodes)
        basis, degree = self.arc.expansion.basis, max(self.polynomial_degree, 1)
        christoffel = basis.christoffel(nodes) / basis.n_terms
        self._note(self._error * christoffel ** (0.5 * (degree + 1) / degree) > WRONG)
        values = self._held(self.arc.quantities(nodes), scales)
        if self._endings is not None:
            # the ensemble's own numbers decide, beside the germ, who ends
            chance = generator(self.study, "endings").random(block * BLOCK + count)
            self.ended = self._endings.draw(nodes, values, chance[block * BLOCK :])
            values[self.times >= self.ended[:, None]] = np.nan
        return values

    def _endings_error(self, ended: FloatArray) -> FloatArray | None:
        if self._endings is None:
            return None
        share, ends = self._endings.share(ended)
        return np.asarray(np.maximum(share - ends.low, ends.high - share))

    def direct(self, scales: FloatArray, count: int, label: str) -> FloatArray:
        germ = self.arc.germ
        nodes = scaled_nodes(germ, self.groups, scales, self._nodes(0, count))
        times, rows = run_times(self.study)
        parameters = germ.parameters(nodes)
        batch = Batch(germ.states(nodes), times, germ.forcing(nodes), parameters)
        with _lenient(self._engine):
            outcomes = self._engine.run(batch, label)
        states = outcomes.states[:, rows]
        self.ended = None if self._endings is None else outcomes.ended
        with np.errstate(invalid="ignore", divide="ignore"):
            return self._quantities(times[rows], states, parameters)

    def _nodes(self, block: int, count: int) -> FloatArray:
        """A block of the study's own ensemble, which is drawn in one go."""
        rng = generator(self.study, "ensemble")
        left = self.study.ensemble.members
        while len(self._states) <= block:
            known = len(self._states)
            if known:
                rng.bit_generator.state = self._states[-1]
                self.arc.germ.sample(rng, min(BLOCK, max(left - (known - 1) * BLOCK, 1)))
            self._states.append(rng.bit_generator.state)
        rng.bit_generator.state = self._states[block]
        held = min(BLOCK, max(left - block * BLOCK, count))
        return self.arc.germ.sample(rng, held)[:count]


@contextmanager
def _lenient(engine: Engine) -> Iterator[None]:
    """All runs may fail: a member without a direct run is left out."""
    policy = engine.policy
    engine.policy = replace(policy, tolerated=1.0)
    try:
        yield
    finally:
        engine.policy = policy


class ScaledChain(Scaled):
    """A chain: members with scaled start and noise pass through its arcs; no member is run.

    An arc's map keeps its members within what its runs have reached and half of it more. With a
    scale beyond one these bounds are moved apart as much, or they would cut off what is asked for.
    """

    def __init__(self, answers: ChainAnswers) -> None:
        horizon = answers.horizon
        super().__init__(horizon.study, answers.groups, _check(answers))
        self.answers, self.horizon, self.chain = answers, horizon, answers.chain

    def members(
        self, scales: FloatArray, block: int, count: int, redrawn: str | None = None
    ) -> FloatArray:
        answers = self._at(scales)
        names = ("start", *self.horizon.germ.parameter_names)
        streams = tuple("b" if redrawn in (ALL, name) else "a" for name in names)
        history = answers.horizon.history
        for j, source in enumerate(self.horizon.germ.noise.sources):
            if redrawn in (ALL, source.name):
                history = history.with_stream(j, "b")
        values = answers.members(history, streams, block, count)
        self._note(answers.outside)
        if self.chain.endings.ended:
            self.ended = answers.ended
        return self._held(values, scales)

    def _endings_error(self, ended: FloatArray) -> FloatArray | None:
        count = self.chain.endings.ended
        if not count:
            return None
        share = np.mean(self.times >= ended[:, None], axis=0)
        return np.asarray(normal_factor() * share / np.sqrt(count))

    def direct(self, scales: FloatArray, count: int, label: str) -> FloatArray:
        answers = self._at(scales)
        horizon = answers.horizon
        nodes = horizon.nodes(horizon.streams("a"), 0, count)
        members = horizon.members_of(nodes, horizon.history, 0)
        values = np.full((count, self.times.size, members.values.shape[1]), np.nan)
        values[:, self.times <= horizon.edges[0]] = members.values[:, None]
        alive = np.arange(count)
        for arc in self.chain.maps:
            white = horizon.fresh(arc.noise, horizon.history, arc.first, arc.last, 0, count)
            words = f"{label}, t = {arc.start:.6g} to {arc.times[-1]:.6g}"
            carried = np.full((count, members.carried.shape[1]), np.nan)
            carried[alive] = members.carried
            found, good = horizon.run(members, arc.noise, white[alive], arc.times, words, True)
            alive, found = alive[good], found[good]
            if not alive.size:
                break
            rows = horizon.output_rows(arc)
            values[np.ix_(alive, rows)] = found[:, horizon.inner_times(arc)]
            carried = horizon.carry(carried, horizon.history, arc.first, arc.last, 0)[alive]
            members = replace(
                members.take(np.flatnonzero(good)), values=found[:, -1], carried=carried
            )
        return answers.of_values(values, horizon.germ.parameters(nodes))

    def _at(self, scales: FloatArray) -> ChainAnswers:
        """The same chain, its members' start, parameters and noise scaled."""
        horizon = copy.copy(self.horizon)
        horizon.germ = scaled_germ(self.horizon.germ, self.groups, scales)
        horizon.history = self.horizon.history.scaled(of_noise(self.groups, scales))
        room = self.room * max(1.0, float(np.max(np.abs(scales), initial=0.0)))
        chain = replace(self.chain, maps=tuple(_widened(arc, room) for arc in self.chain.maps))
        return ChainAnswers(horizon, chain, self.answers.quantities)


def _widened(arc: ArcMap, room: float) -> ArcMap:
    if room == 1.0:
        return arc
    middle, half = 0.5 * (arc.low + arc.high), 0.5 * (arc.high - arc.low)
    return replace(arc, low=middle - room * half, high=middle + room * half)


def _check(answers: ChainAnswers) -> HeldOut:
    """The check's members; their errors in the quantities' own units."""
    return answers.checked(np.ones((answers.times.size, len(answers.quantities.names))))
