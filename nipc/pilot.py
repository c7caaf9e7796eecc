"""A few runs before many: how long all of them will take, and what degrees a chain may need."""

from __future__ import annotations

import math
import os
import tempfile
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from nipc.arrays import FloatArray
from nipc.chain.plan import Plan, noise_terms

if TYPE_CHECKING:
    from nipc.problem.charts import Chart
    from nipc.problem.study import Study
    from nipc.runs.outcomes import Outcomes
    from nipc.runs.propagator import Batch, Propagator

FEW = 4
BLOCK, PATIENCE = 64, 5.0
"""One that takes many runs at once is timed on a block, unless a few took so many seconds."""
PAIRS, STRETCHES = 2, 8
STRONGEST, GUESS = 0.3, 0.3


@dataclass(frozen=True)
class Pilot:
    """What a few runs foretell. Times in seconds.

    `made` pilot runs, `failed` of them; `run_seconds` for one run of one arc, `design_runs` and
    `check_runs` of one arc each; `seconds` of all of them with `jobs` at a time, if these do not
    slow each other. `equivalents`: the same as whole runs of the horizon. `degrees` (lowest,
    highest) that the arcs may need; None where all is known without.
    """

    made: int
    failed: int
    reason: str
    run_seconds: float
    design_runs: int
    check_runs: int
    equivalents: float
    jobs: int
    seconds: float
    degrees: tuple[int, int] | None
    least: bool

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON: null where there is no number."""
        plain = asdict(self)
        return {k: None if isinstance(v, float) and math.isnan(v) else v for k, v in plain.items()}


def pilot(study: Study, plan: Plan, jobs: int = 1) -> Pilot:
    """Make a few runs of the study's propagator and foretell the rest; nothing of them is kept."""
    from nipc.chain.horizon import cell_count
    from nipc.workflow import build_propagator

    propagator = build_propagator(study)
    workers = jobs if jobs > 0 else max(1, (os.cpu_count() or 1) + 1 + jobs)
    timed = _timed(study, propagator)
    made, failed = len(timed), int((~timed.ok).sum())
    # the first run may load what the others find loaded
    seconds = float(np.median(timed.seconds[timed.ok])) if timed.ok.any() else float("nan")
    reason = next((r for r in timed.reasons if r is not None), "")
    design, check, degrees, least = plan.design_runs, plan.check_runs, None, False
    arcs = cell_count(study)
    if arcs > 1 and study.chain.state_degree == "auto":
        paths = _paths(study, propagator) if timed.ok.any() else None
        made += STRETCHES * (1 + 2 * PAIRS) if timed.ok.any() else 0
        least = paths is None
        if paths is not None:
            design, degrees = _forecast(study, paths)
    every = design + check
    return Pilot(
        made, failed, reason, seconds, design, check, every / arcs, workers,
        every * seconds / workers, degrees, least,
    )  # fmt: skip


def _asked(study: Study, propagator: Propagator, batch: Batch) -> Outcomes:
    """Runs in a process of their own, in a folder that is gone afterwards."""
    from nipc.runs.engine import Engine, FailurePolicy
    from nipc.runs.ledger import Ledger

    policy = FailurePolicy(retries=0, tolerated=1.0)
    with (
        tempfile.TemporaryDirectory(prefix="nipc-pilot-") as folder,
        Ledger.open(Path(folder)) as ledger,
        Engine(propagator, ledger, time_limit=study.runs.time_limit, policy=policy) as engine,
    ):
        return engine.run(batch, "pilot")


def _timed(study: Study, propagator: Propagator) -> Outcomes:
    """Runs of the first arc, as many as are needed to time one."""
    found = _asked(study, propagator, _first_arc(study, FEW))
    if propagator.vectorised and found.seconds.sum() < PATIENCE:
        return _asked(study, propagator, _first_arc(study, BLOCK))
    return found


def _first_arc(study: Study, count: int) -> Batch:
    from nipc.chain.horizon import cell_count
    from nipc.chain.single_arc import generator, run_times
    from nipc.problem.germ import Germ
    from nipc.runs.propagator import Batch

    start, length = study.clock.start, study.clock.length / cell_count(study)
    end = start + length
    times, _ = run_times(study)
    times = np.unique(np.append(times[times <= end * (1 + 1e-12)], [start, end]))
    germ = Germ.of(study, noise_terms(study, length), start, end)
    nodes = germ.sample(generator(study, "pilot"), count)
    return Batch(germ.states(nodes), times, germ.forcing(nodes), germ.parameters(nodes))


@dataclass(frozen=True)
class _Paths:
    """Chart values at the arcs' edges: (pairs, T, d) odd and even parts of pairs of members."""

    odd: FloatArray
    even: FloatArray


def pair_states(
    study: Study, propagator: Propagator, pairs: int
) -> tuple[FloatArray, FloatArray] | None:
    """The mean germ and pairs of opposite members over the whole horizon; None if any failed.

    Returns the arcs' edges (T,) and states (1 + 2 pairs, T, d): the middle, the members, their
    opposites. In some stretches of arcs, each with noise of its own: over the whole horizon at once
    the noise would have many terms.
    """
    from nipc.chain.horizon import cell_count
    from nipc.chain.single_arc import generator
    from nipc.problem.germ import Germ
    from nipc.runs.propagator import Batch

    clock = study.clock
    edges = np.linspace(clock.start, clock.end, cell_count(study) + 1)
    states: FloatArray | None = None
    parts: list[FloatArray] = []
    for k, places in enumerate(np.array_split(np.arange(1, edges.size), STRETCHES)):
        if not places.size:
            continue
        times = edges[places[0] - 1 : places[-1] + 1]
        length = float(times[-1] - times[0])
        germ = Germ.of(study, noise_terms(study, length), float(times[0]), float(times[-1]))
        some = germ.sample(generator(study, f"pilot {k}"), pairs)
        middle = _centre(germ.sample(generator(study, "pilot centre"), 400), germ.first_noise)
        nodes = np.vstack([middle, some, 2.0 * middle - some])
        if states is None:
            states, parameters = germ.states(nodes), germ.parameters(nodes)
            parts.append(states[:, None])
        batch = Batch(states, times, germ.forcing(nodes), parameters)
        found = _asked(study, propagator, batch)
        if not (found.ok.all() and np.isfinite(found.states).all()):
            return None
        parts.append(found.states[:, 1:])
        states = found.states[:, -1]
    return edges, np.concatenate(parts, axis=1)


def _paths(study: Study, propagator: Propagator) -> _Paths | None:
    """The pairs' odd and even parts in the study's chart; None if any failed."""
    from nipc.problem.charts import build_chart
    from nipc.problem.units import chart_time_scale

    found = pair_states(study, propagator, PAIRS)
    if found is None:
        return None
    edges, states = found
    units = tuple(c.unit for c in study.state)
    chart = build_chart(
        study.chart, study.state_names, units, study.start_law().mean, study.clock.start,
        study.folder,
    )  # fmt: skip
    at = edges * chart_time_scale(study.clock.unit, list(units))
    return _Paths(*parts_of(chart, states, at))


def parts_of(chart: Chart, states: FloatArray, at: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Odd and even parts (pairs, T, d) of the pairs' chart values at the chart's times (T,)."""
    values = chart.from_state(states, at)
    values = chart.unwrap(values, at, values[:, 0])
    pairs = values.shape[0] // 2
    ahead, behind = values[1 : 1 + pairs], values[1 + pairs :]
    return 0.5 * (ahead - behind), 0.5 * (ahead + behind) - values[0]


def _centre(nodes: FloatArray, first_noise: int) -> FloatArray:
    """The mean of the germ, near enough for parameters whose law has another than zero."""
    middle = nodes.mean(axis=0, keepdims=True)
    middle[:, first_noise:] = 0.0
    return middle


def _forecast(study: Study, paths: _Paths) -> tuple[int, tuple[int, int]]:
    """Runs of all arcs' designs, and the lowest and highest degree. A rule of thumb.

    What an arc adds to the even part over the odd one, a, stands for the size of degree two over
    degree one in it, and a^d for what degree d leaves; members far out want one degree more.
    """
    spread, curved = (np.sqrt((part**2).mean(axis=0)) for part in (paths.odd, paths.even))
    # at a turning point a component has next to no spread for a moment
    spread = np.maximum.accumulate(spread, axis=0)
    live = spread > 1e-9 * spread.max(axis=0)
    ratio = np.where(live, curved / np.where(live, spread, 1.0), 0.0).max(axis=1)
    added = np.diff(np.maximum.accumulate(ratio))
    # where nothing is added, what is typical elsewhere; past one, degrees no longer tell apart
    added = np.maximum(added, np.median(added[added > 0])) if (added > 0).any() else added
    added = np.where(ratio[1:] > 1.0, STRONGEST, np.minimum(added, STRONGEST))
    allowed = study.chain.arc_tolerance or study.tolerance / math.sqrt(added.size)
    largest, degrees = study.chain.largest_degree, []
    for a in added:
        needed = 1 if a <= allowed else math.ceil(math.log(allowed) / math.log(a)) + 1
        degrees.append(min(needed, largest))
    whole = np.sqrt((spread**2).sum(axis=1))
    sizes = np.minimum(GUESS, whole[1] / np.maximum(whole[:-1], 1e-300))
    kinds = {(d, float(f"{s:.1g}")) for d, s in zip(degrees, sizes, strict=True)}
    cost = {kind: _design_runs(study, added.size, *kind) for kind in kinds}
    runs = sum(cost[d, float(f"{s:.1g}")] for d, s in zip(degrees, sizes, strict=True))
    return runs, (min(degrees), max(degrees))


def _design_runs(study: Study, arcs: int, degree: int, size: float) -> int:
    """Runs of one arc's design of that degree, its noise variables of that relative size."""
    from nipc.chain.arc import ArcBasis
    from nipc.problem.germ import Germ

    start, length = study.clock.start, study.clock.length / arcs
    germ = Germ.of(study, noise_terms(study, length), start, start + length)
    carried = sum(source.carried for source in germ.noise.sources)
    variables = len(study.state) + carried + len(germ.parameter_names)
    cloud = np.random.default_rng(1).standard_normal((4000, variables))
    count = sum(basis.terms for basis in germ.noise.bases)
    basis = ArcBasis.of(cloud, np.full(count, size), degree, study.chain.noise_degree)
    terms = basis.up_to(degree).n_terms
    return max(math.ceil(study.chain.oversampling * terms), terms + 4)
