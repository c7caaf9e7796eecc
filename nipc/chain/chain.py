"""Arc by arc: expansions of successive arcs, built on a pool of members, checked as they grow."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.arc import ArcMap
from nipc.chain.arc_fit import ArcFit, Trial
from nipc.chain.direct import Continued, continue_directly
from nipc.chain.endings import EndingsSeen
from nipc.chain.horizon import Horizon, Members
from nipc.chain.records import ArcRecord
from nipc.chain.steering import Done, Steering, Step, Tried
from nipc.chain.ticks import TICKS
from nipc.errors import FitError

POOL = 16384  # members from which designs are picked: the more, the fewer lie outside them
KEPT_FOR_DIRECT = 0.3  # of a budget that the arcs would overdraw, for going on by direct runs


@dataclass(frozen=True, eq=False)
class Chain:
    """The arcs up to `reached`, and the check's members at all output times.

    direct, predicted (C, T, d) are chart values, NaN beyond what was reached; check_ended (2, C) is
    when the members ended for a physical reason, directly and by the arcs, NaN where they did not.
    `stopped` before the horizon's end: `continued` are then those that went on by direct runs, if
    any.
    """

    maps: tuple[ArcMap, ...]
    records: tuple[ArcRecord, ...]
    direct: FloatArray
    predicted: FloatArray
    check_nodes: FloatArray
    reached: float
    stopped: bool
    notes: tuple[str, ...]
    endings: EndingsSeen
    check_ended: FloatArray
    continued: Continued | None = None


@dataclass(frozen=True, eq=False)
class _Built:
    """An arc as built: its map (None when it failed), record, held-out truth, and its endings."""

    map: ArcMap | None
    record: ArcRecord
    truth: FloatArray
    ended: FloatArray


class ChainBuilder:
    """Builds the arcs of a study one after the other.

    The pool (the ensemble's first members) gives each arc its basis and the candidates of its
    design. The check's members are run directly through every arc; they are each arc's held-out
    runs too: their states are true ones, their noise paths richer than the expansion sees.
    `told` hears of the records whenever an arc is done.
    """

    def __init__(
        self,
        horizon: Horizon,
        told: Callable[[list[ArcRecord]], None] | None = None,
        tolerance: float | None = None,
    ) -> None:
        self.horizon = horizon
        self.study = study = horizon.study
        self.told = told
        self.tolerance = tolerance or study.tolerance
        self.checked = horizon.history.restreamed("check")
        self.steering = Steering.of(study.chain, self.tolerance)
        self.sizes: FloatArray | None = None
        self.saved = 0.0  # run-equivalents that the pool's far members may still take
        self.seen = EndingsSeen()
        self.notes: list[str] = []

    def tightened(self, factor: float) -> ChainBuilder:
        """A builder whose arcs must agree `factor` times better."""
        other = ChainBuilder(self.horizon, self.told, self.tolerance * factor)
        other.seen = self.seen
        return other

    def build(self, before: Chain | None = None) -> Chain:
        """All arcs, or those up to where the polynomials fail or the budget is spent.

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
        at, stopped = 0, ""
        while at < horizon.end:
            if stopped := self._overdrawn(records):
                break
            try:
                built = self._arc_or_kept(at, pool, direct, before)
            except FitError as error:  # too many runs failed
                stopped = str(error)
                break
            records.append(built.record)
            if self.told is not None:
                self.told(records)
            if built.map is None:
                stopped = built.record.note
                break
            arc = built.map
            self.steering = self.steering.passed(
                horizon.share(arc.first, arc.last), built.record.error
            )
            rows, inside = horizon.output_rows(arc), horizon.inner_times(arc)
            pool = horizon.advance(arc, pool, horizon.history, 0, built.record.direct)[1]
            steps, chained = horizon.advance(arc, chained, self.checked, 0, study.check.runs)
            seen[:, rows] = built.truth[:, inside]
            predicted[:, rows] = steps[:, inside]
            direct = replace(
                direct, values=built.truth[:, -1], carried=chained.carried,
                ended=np.fmin(direct.ended, built.ended),
            )  # fmt: skip
            maps.append(arc)
            at = arc.last
        reached = float(horizon.ticks[at])
        continued = None
        if stopped:
            where = f"t = {reached:g} {study.clock.unit}"
            self.notes.append(f"The chain stops at {where}: {stopped}.")
            continued, words = continue_directly(horizon, pool, at)
            self.notes.append(words)
        return Chain(
            self._granted(maps, records), tuple(records), seen, predicted, nodes, reached,
            bool(stopped), tuple(self.notes), self.seen,
            np.stack([direct.ended, chained.ended]), continued,
        )  # fmt: skip

    def _granted(self, maps: list[ArcMap], records: list[ArcRecord]) -> tuple[ArcMap, ...]:
        """The arcs with the direct runs that their far members get: the study's share of all."""
        share = [self.horizon.share(arc.first, arc.last) for arc in maps]
        spent = sum(r.runs * s for r, s in zip(records, share, strict=False))
        need = sum(arc.direct_runs * s for arc, s in zip(maps, share, strict=True))
        part = min(1.0, self.study.chain.direct_share * spent / need) if need else 1.0
        # the pool's count is a sample: leave room for three more than it has shown
        room = 3.0 * self.study.ensemble.members / POOL
        # and of endings all arcs together tell more than those before an arc
        endings = self.seen.fitted()
        return tuple(
            replace(a, direct_runs=part * (a.direct_runs + room), endings=endings) for a in maps
        )

    def _overdrawn(self, records: list[ArcRecord]) -> str:
        """Why the budget ends the chain here, or nothing."""
        budget = self.study.budget
        if budget is None or not records:
            return ""
        clock, last, cost = self.study.clock, records[-1], self.horizon.cost
        rate = last.runs + self.study.check.runs  # run-equivalents, were the whole horizon so
        left = cost + rate * (clock.end - last.end) / clock.length
        cost += rate * (last.end - last.start) / clock.length
        if left > budget and cost > (1.0 - KEPT_FOR_DIRECT) * budget:
            return (
                f"all arcs would take some {left:.0f} run-equivalents, and the budget is {budget:g}"
            )
        return ""

    def _arc_or_kept(self, at: int, pool: Members, direct: Members, before: Chain | None) -> _Built:
        limit = self.horizon.end
        if before is not None:
            known = [(arc.first, i) for i, arc in enumerate(before.maps)]
            for first, i in known:
                if first == at and self._good_enough(before, i):
                    return self._kept(before, i, direct)
                if first == at:
                    # no longer than it was, and no easier: the arcs after it may be kept
                    arc = before.maps[i]
                    degree = max(self.steering.degree, arc.degree)
                    self.steering = replace(
                        self.steering, degree=degree, length=arc.last - arc.first, rested=False
                    )
            limit = min([first for first, _ in known if first > at], default=limit)
        return self._arc(at, limit, pool, direct)

    def _good_enough(self, before: Chain, i: int) -> bool:
        arc = before.maps[i]
        share = self.horizon.share(arc.first, arc.last)
        return before.records[i].error <= self.steering.allowed(share)

    def _kept(self, before: Chain, i: int, direct: Members) -> _Built:
        """An arc of an earlier chain; its held-out runs go on from where the others now stand."""
        horizon, arc = self.horizon, before.maps[i]
        terms = tuple(b.terms for b in arc.noise.bases)
        rich = horizon.model(arc.first, arc.last, self.study.check.richness, terms)
        count = direct.values.shape[0]
        white = horizon.fresh(rich, self.checked, arc.first, arc.last, 0, count)
        label = f"t = {arc.start:.6g} to {arc.times[-1]:.6g}, check"
        truth, _, ended = horizon.run_to_end(direct, rich, white, arc.times, label)
        self.steering = replace(self.steering, degree=arc.degree, length=arc.last - arc.first)
        self.sizes = None
        return _Built(arc, before.records[i], truth, ended)

    # -- one arc ---------------------------------------------------------------------------------

    def _arc(self, at: int, limit: int, pool: Members, direct: Members) -> _Built:
        """Raise the degree, then shorten, until the held-out runs agree or nothing helps."""
        horizon = self.horizon
        longer, words = list[Tried](), list[str]()
        pilot = at == 0 and any(horizon.terms.open)
        while True:
            last = self.steering.span(at, limit)
            share = horizon.share(at, last)
            terms = horizon.terms.piloted if pilot else None
            fit = ArcFit(horizon, at, last, pool, direct, self.checked, terms)
            step, reason, best, tried = self._raised(fit, share, longer)
            if pilot:
                self._learn(best)
                pilot = False
            if step is not Step.HALVE:
                break
            longer.append(min(tried, key=lambda t: t.error))
            words.append(f"halved at degree {longer[-1].degree} ({longer[-1].error:.1%} off)")
            self.steering, self.sizes = self.steering.shorter(last - at), None
        words += [reason] if reason else []
        words += ["others took the place of runs that ended"] if fit.ended else []
        # what the ensemble would need; `_granted` cuts it to what it may have
        need = self._far(best.map, fit)
        arc = replace(best.map, direct_runs=need, endings=fit.endings(best.map, self.seen))
        self.saved += self.study.chain.direct_share * fit.runs * share
        in_pool = need * fit.rows.size / self.study.ensemble.members
        beyond = min(round(in_pool), int(self.saved / share))
        self.saved -= beyond * share
        allowed = self.steering.allowed(share)
        done = Done(
            best.degree, best.error / allowed, best.lower / allowed, last - at,
            fit.runs + self.study.check.runs, self._dearer((last - at) / TICKS, fit.width),
        )  # fmt: skip
        self.steering, word = self.steering.after(done)
        words += [word] if word else []
        record = ArcRecord(
            float(horizon.ticks[at]), float(horizon.ticks[last]), best.degree,
            best.map.basis.n_terms, fit.runs, best.error, "; ".join(words), fit.failed, beyond,
            allowed,
        )  # fmt: skip
        if step is Step.STOP:
            return _Built(None, replace(record, note=reason, direct=0), fit.truth, fit.held_ended)
        return _Built(arc, record, fit.truth, fit.held_ended)

    def _dearer(self, cells: float, width: int) -> float:
        """How many times the linear terms an arc of twice as many cells has."""
        short, long = (1 + width + sum(self.horizon.terms.at(k * cells)) for k in (1.0, 2.0))
        return long / short

    def _raised(
        self, fit: ArcFit, share: float, longer: list[Tried]
    ) -> tuple[Step, str, Trial, list[Tried]]:
        """Trials of rising degree until it is clear what to do; the best of them."""
        allowed = self.steering.allowed(share)
        tried: list[Tried] = []
        best: Trial | None = None
        degree = self.steering.degree
        while True:
            trial = fit.trial(degree, self.sizes)
            self.sizes = trial.map.sizes(trial.spread)
            terms = trial.map.basis.n_terms
            # terms of degree p + 1 beside p in `width` variables: (p + 1 + width) / (p + 1) as many
            dearer = self.study.chain.oversampling * terms * fit.width / (degree + 1)
            tried.append(
                Tried(
                    degree,
                    trial.error / allowed,
                    trial.error,
                    terms,
                    self._far(trial.map, fit),
                    dearer,
                )
            )
            if best is None or trial.error < best.error or trial.error <= allowed:
                best = trial
            step, reason = self.steering.judge(tried, fit.last - fit.first, longer)
            if step is not Step.RAISE:
                return step, reason, best, tried
            degree += 1

    def _far(self, arc: ArcMap, fit: ArcFit) -> float:
        """How many members of the ensemble lie far outside an arc's design, by the pool's share."""
        outside = arc(fit.candidates)[1]
        return float(np.mean(outside > 1.0)) * self.study.ensemble.members

    def _learn(self, trial: Trial) -> None:
        """Keep as many noise terms as the first arc's response uses."""
        horizon = self.horizon
        before = horizon.terms.piloted
        # a hundredth of the tolerance in the standard deviation, as lost variance
        loss = (0.25 * self.study.tolerance) ** 2
        horizon.terms = horizon.terms.kept(trial.map.linear_response, loss)
        kept = ", ".join(
            f"{k} of {n} for {s.name}"
            for k, n, s in zip(horizon.terms.cell, before, horizon.germ.noise.sources, strict=True)
            if k != n
        )
        if kept:
            self.notes.append(f"Noise terms that the first arc's response uses: {kept}.")
        self.sizes = None
