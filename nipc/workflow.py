"""Study in, result out: the whole way, for Python and the command line alike."""

from __future__ import annotations

import json
import platform
import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from nipc.chain.plan import Plan, basis_losses, group_sizes, noise_terms
from nipc.errors import Finding, InputError
from nipc.problem.quantities import QuantityFunction, QuantitySet, component, expression
from nipc.problem.study import QuantitySettings, Study
from nipc.problem.study_file import load_study as read_study
from nipc.problem.study_file import settings_findings

if TYPE_CHECKING:
    from nipc.answers.chained import ChainAnswers
    from nipc.answers.result import Result
    from nipc.answers.table import ResultTable
    from nipc.chain.horizon import Horizon
    from nipc.chain.records import ArcRecord
    from nipc.problem.germ import Germ
    from nipc.runs.engine import Engine
    from nipc.runs.outcomes import Outcomes
    from nipc.runs.probe import ProbeReport
    from nipc.runs.progress import Progress
    from nipc.runs.propagator import AdapterContext, Propagator


def load_study(path: str | Path) -> Study:
    """The study in a TOML file, its adapter's settings checked too; nothing of the user's is run.

    Raises StudyError with all that is wrong, InputError when the file cannot be read.
    """
    return read_study(path, _adapter_findings)


def _adapter_findings(study: Study | None, raw: dict[str, Any], folder: Path) -> list[Finding]:
    from pydantic import ValidationError

    from nipc.adapters import load_adapter

    table = raw.get("propagator")
    if not isinstance(table, dict) or not isinstance(table.get("adapter"), str):
        return []
    try:
        adapter = load_adapter(table["adapter"])
    except InputError as error:
        return [Finding("propagator.adapter", str(error))]
    settings = {k: v for k, v in table.items() if k != "adapter"}
    try:
        checked = adapter.Settings.model_validate(settings)
    except ValidationError as error:
        return settings_findings(error, "propagator")
    if study is None:
        return []
    try:
        adapter.check(checked, adapter_context(study, folder))
    except InputError as error:
        return [Finding("propagator", str(error))]
    return []


def work_folder(study: Study) -> Path:
    """Where a study's ledger, data, figures and page are kept."""
    return study.folder / f"{study.name}.work"


def adapter_context(study: Study, folder: Path) -> AdapterContext:
    """What the adapter may know of the study; `folder` is the study's."""
    from nipc.runs.propagator import AdapterContext

    return AdapterContext(
        folder,
        work_folder(study) / "runs",
        study.state_names,
        study.parameter_names,
        study.source_names,
        tuple(n.name for n in study.noise if n.calculus == "ito"),
    )


def build_propagator(study: Study) -> Propagator:
    """The propagator that the study names, wrapped by its adapter."""
    from pydantic import ValidationError

    from nipc.adapters import load_adapter
    from nipc.errors import StudyError

    adapter = load_adapter(study.propagator.adapter)
    try:
        settings = adapter.Settings.model_validate(study.propagator.settings)
    except ValidationError as error:
        raise StudyError(settings_findings(error, "propagator")) from None
    return adapter.build(settings, adapter_context(study, study.folder))


def build_quantities(study: Study) -> QuantitySet:
    """The study's quantities as one function."""
    return QuantitySet(
        tuple(q.name for q in study.quantity), tuple(_quantity(study, q) for q in study.quantity)
    )


def _quantity(study: Study, settings: QuantitySettings) -> QuantityFunction:
    if settings.expression is not None:
        return expression(settings.expression, study.state_names, study.parameter_names)
    if settings.function is not None:
        from nipc.adapters import load_function

        function: QuantityFunction = load_function(study.folder, settings.function)
        return function
    return component(study.state_names.index(settings.component or settings.name))


def plan(study: Study) -> Plan:
    """Germ, terms, runs and what each basis loses; the propagator's code is not run."""
    from nipc.chain.single_arc import design_of, germ_of

    if study.chain.arcs != 1:
        return _chain_plan(study)
    germ = germ_of(study)
    if study.expansion.degree == "auto":
        return _open_plan(study, germ)
    design = design_of(study, germ)
    terms = noise_terms(study, study.clock.length)
    runs = design.nodes.shape[0]
    notes = []
    if study.clock.period is None and any(n.terms == "auto" for n in study.noise):
        notes.append(
            f"clock.period is not given, so {terms[0]} noise terms are taken; the check's direct "
            f"runs have {study.check.richness * terms[0]} and show what that loses."
        )
    return Plan(
        study.title,
        group_sizes(germ),
        1,
        design.basis.n_terms,
        design.words,
        runs,
        study.check.runs,
        runs + study.check.runs,
        study.budget,
        basis_losses(study, terms, study.clock.length),
        tuple(notes),
    )


def _open_plan(study: Study, germ: Germ) -> Plan:
    """A design that is enriched until the tolerance is kept: the most that it may take."""
    from nipc.chain.single_arc import auto_budget

    terms = noise_terms(study, study.clock.length)
    most = auto_budget(study)
    if most < 2 * germ.size + 2:
        raise InputError(
            f"the budget leaves {most} runs for a design in {germ.size} germ variables; at least "
            f"{2 * germ.size + 2} are needed: raise the budget or give fewer noise terms"
        )
    return Plan(
        study.title,
        group_sizes(germ),
        1,
        germ.size + 1,
        "enriched until the tolerance is kept",
        most,
        study.check.runs,
        most + study.check.runs,
        study.budget,
        basis_losses(study, terms, study.clock.length),
        ("The runs are the most that may be made; they end when the error keeps the tolerance.",),
    )


def _chain_plan(study: Study) -> Plan:
    """A chain's runs are only known arc by arc; the plan tells the least, all arcs being linear."""
    import math

    from nipc.chain.horizon import cell_count
    from nipc.problem.germ import Germ

    arcs = cell_count(study)
    length = study.clock.length / arcs
    terms = noise_terms(study, length)
    germ = Germ.of(study, terms, study.clock.start, study.clock.start + length)
    carried = sum(s.carried for s in germ.noise.sources)
    linear = 1 + len(study.state) + carried + len(germ.parameter_names) + sum(terms)
    design = max(math.ceil(study.chain.oversampling * linear), linear + 4) * arcs
    check = study.check.runs * arcs
    return Plan(
        study.title,
        group_sizes(germ),
        arcs,
        linear,
        "near D-optimal subset of the ensemble, arc by arc",
        design,
        check,
        design + check,
        study.budget,
        basis_losses(study, terms, length),
        (
            f"Runs are of one arc each, a {arcs}th part of the horizon: "
            f"{(design + check) / arcs:.0f} run-equivalents if every arc is nearly linear; where "
            "held-out runs disagree the degree is raised and more runs are made.",
        ),
    )


def probe(study: Study) -> ProbeReport:
    """A handful of runs that find the usual mistakes: see `nipc.runs.probe`.

    They cover the first two arcs of a chain, or the whole of a single arc.
    """
    from nipc.chain.horizon import cell_count
    from nipc.chain.noise_terms import NoiseTerms
    from nipc.chain.single_arc import generator, run_times
    from nipc.problem.germ import Germ
    from nipc.runs.probe import probe as ask
    from nipc.runs.propagator import Batch

    times, _ = run_times(study)
    arcs = cell_count(study)
    if arcs > 1:
        edges = np.linspace(study.clock.start, study.clock.end, arcs + 1)[:3]
        inner = times[(times > edges[0]) & (times < edges[2])]
        times = np.unique(np.concatenate([edges, inner]))
    else:
        times = times[np.unique(np.linspace(0, times.size - 1, 9).round().astype(int))]
    terms = noise_terms(study, float(times[-1] - times[0]))
    germ = Germ.of(study, terms, float(times[0]), float(times[-1]))
    nodes = germ.sample(generator(study, "probe"), 4)
    batch = Batch(germ.states(nodes), times, germ.forcing(nodes), germ.parameters(nodes))
    noise = germ.noise
    if arcs > 1:
        most = NoiseTerms.of(study, float(edges[1] - edges[0])).piloted
        noise = Germ.of(study, most, float(edges[0]), float(edges[1])).noise
    return ask(
        build_propagator(study),
        batch,
        study.state_names,
        tolerance=study.tolerance,
        time_limit=study.runs.time_limit,
        arc_noise=noise,
    )


def run(
    study: Study,
    *,
    n_jobs: int = 1,
    folder: str | Path | None = None,
    progress: Progress | None = None,
    backend: str = "processes",
    scheduler: str | None = None,
    retry_failed: bool = False,
) -> Result:
    """Run the study: design, runs, expansion, check, answers.

    Runs that the ledger in the work folder already holds are not made again, nor those that failed
    unless `retry_failed`. Results are saved there and returned. `backend` "inline" runs the
    propagator in this process, "dask" on the cluster whose `scheduler` is named by its address.
    """
    from nipc.answers.evidence import add_failures
    from nipc.answers.result import Result
    from nipc.answers.verdict import findings
    from nipc.runs.engine import Engine, FailurePolicy
    from nipc.runs.ledger import Ledger
    from nipc.runs.progress import usual

    began = time.monotonic()
    place = Path(folder) if folder is not None else work_folder(study)
    forecast = plan(study)
    propagator, quantities = build_propagator(study), build_quantities(study)
    policy = FailurePolicy(
        retries=study.runs.retries, tolerated=study.runs.tolerated_failures, again=retry_failed
    )
    with (
        Ledger.open(place) as ledger,
        Engine(
            propagator,
            ledger,
            n_jobs=n_jobs,
            time_limit=study.runs.time_limit,
            policy=policy,
            progress=progress or usual(),
            backend=backend,
            scheduler=scheduler,
        ) as engine,
    ):
        # a chain or an enriched design knows how many runs it takes only as they are made
        if study.chain.arcs == 1 and study.expansion.degree != "auto":
            ledger.expect(forecast.total_runs)
        solved = (_one_arc if study.chain.arcs == 1 else _many_arcs)(study, engine, quantities)
        # what a chain's plan says of its runs is a forecast, and the arcs have told since
        told = forecast.notes if study.chain.arcs == 1 else ()
        notes = [*ledger.notes, *engine.notes, *solved.notes, *solved.table.notes, *told]
    attributes = _provenance(study, solved.outcomes, began, n_jobs) | {
        "run_equivalents": solved.cost,
        "notes": json.dumps(notes),
    }
    add_failures(solved.table, engine.failed)
    dataset = solved.table.dataset(attributes)
    dataset.attrs["findings"] = json.dumps(findings(dataset))
    result = Result(dataset, place)
    result.save()
    return result


@dataclass(frozen=True)
class _Solved:
    """What a way of solving hands on."""

    table: ResultTable
    outcomes: tuple[Outcomes, ...]
    cost: float
    notes: tuple[str, ...]


def _one_arc(study: Study, engine: Engine, quantities: QuantitySet) -> _Solved:
    from nipc.answers.panel_data import add_panel
    from nipc.answers.scaled import ScaledArc
    from nipc.answers.single import single_arc_table
    from nipc.chain.single_arc import solve

    arc = solve(study, engine, quantities)
    cost = float(sum(len(o) for o in arc.outcomes))
    table = single_arc_table(arc)
    add_panel(table, ScaledArc(arc, engine, quantities))
    return _Solved(table, arc.outcomes, cost, arc.notes)


def _many_arcs(study: Study, engine: Engine, quantities: QuantitySet) -> _Solved:
    from nipc.answers.panel_data import add_panel
    from nipc.answers.scaled import ScaledChain

    answers, notes = solved_chain(study, engine, quantities)
    horizon = answers.horizon
    table = answers.table()
    add_panel(table, ScaledChain(answers))
    notes += answers.chain.notes
    if answers.ensemble_lost:
        notes.append(
            f"{answers.ensemble_lost} of {study.ensemble.members} members passed outside what the "
            "arcs' designs cover and were not run directly; from there on they move by the linear "
            "parts of the expansions, within what runs have reached."
        )
    return _Solved(table, tuple(horizon.outcomes), horizon.cost, tuple(notes))


def solved_chain(
    study: Study, engine: Engine, quantities: QuantitySet
) -> tuple[ChainAnswers, list[str]]:
    """The chain, tightened until its held-out paths keep the tolerance, and what is to be noted."""
    from nipc.answers.chained import ChainAnswers
    from nipc.chain.chain import ChainBuilder

    horizon = build_horizon(study, engine)
    builder = ChainBuilder(horizon, _teller(study, engine.ledger.folder, engine.progress))
    chain = builder.build()
    answers = ChainAnswers(horizon, chain, quantities)
    notes = []
    for _ in range(study.chain.rounds):
        error = answers.path_error()
        if error <= study.tolerance or chain.stopped or study.chain.state_degree != "auto":
            break
        if study.budget is not None and 1.5 * horizon.cost > study.budget:
            notes.append(
                f"The held-out paths were off by {error:.1%} of the spread; the budget leaves too "
                "little to do the coarser arcs again."
            )
            break
        # what the arcs' errors add up to is known only now: tighten those that are too coarse
        builder = builder.tightened(max(0.2, 0.6 * study.tolerance / error))
        notes.append(
            f"The held-out paths were off by {error:.1%} of the spread, so the coarser arcs were "
            "done again."
        )
        chain = builder.build(chain)
        answers = ChainAnswers(horizon, chain, quantities)
    return answers, notes


def _teller(study: Study, place: Path, progress: Progress) -> Callable[[list[ArcRecord]], None]:
    """Tells the progress of every arc as it is done, and `nipc status` in another terminal."""
    from nipc.chain.records import write_records
    from nipc.runs.journey import ArcTold

    def tell(records: list[ArcRecord]) -> None:
        write_records(place, records)
        last, clock = records[-1], study.clock
        progress.arc(
            ArcTold(
                len(records), last.end, clock.start, clock.end, clock.unit, last.degree,
                last.runs, last.error, last.note,
            )
        )  # fmt: skip

    return tell


def build_horizon(study: Study, engine: Engine) -> Horizon:
    """The cells, chart and noise histories of a study's chain; ChartError where a chart fails."""
    from nipc.chain.horizon import Horizon, cell_count
    from nipc.chain.single_arc import generator
    from nipc.problem.charts import build_chart
    from nipc.problem.germ import Germ

    terms = noise_terms(study, study.clock.length / cell_count(study))
    germ = Germ.of(study, terms, study.clock.start, study.clock.end)
    units = tuple(c.unit for c in study.state)
    chart = build_chart(
        study.chart, study.state_names, units, germ.start.mean, study.clock.start, study.folder
    )
    horizon = Horizon(study, engine, germ, chart)
    some = germ.states(germ.sample(generator(study, "chart"), 200))
    chart.check(some, study.clock.start * horizon.chart_time)
    return horizon


def _provenance(
    study: Study, outcomes: tuple[Outcomes, ...], began: float, n_jobs: int
) -> dict[str, Any]:
    """The attributes of a result: everything that tells where its numbers come from."""
    from nipc.runs.failures import causes

    reasons = causes(r for o in outcomes for r in o.reasons)
    packages = ("nipc", "numpy", "scipy", "scikit-learn", "chaospy", "joblib", "xarray")
    versions = {p: version(p) for p in packages} | {"python": platform.python_version()}
    steps = np.diff(study.clock.times)
    return {
        "title": study.title,
        "seed": study.seed,
        "time_unit": study.clock.unit,
        "tolerance": study.tolerance,
        "propagator_runs": sum(len(o) for o in outcomes),
        "reused_runs": int(sum(o.reused.sum() for o in outcomes)),
        "failed_runs": int(sum((~o.ok).sum() for o in outcomes)),
        "failures": json.dumps([{"reason": r, "count": c} for r, c in reasons]),
        "budget": study.budget if study.budget is not None else float("nan"),
        "members": study.ensemble.members,
        "wall_time": time.monotonic() - began,
        "workers": n_jobs,
        "study": study_text(study),
        "versions": json.dumps(versions),
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "monitoring_interval": float(steps.max(initial=0.0)),
    }


def study_text(study: Study) -> str:
    """The study file as it was read, or what a study made in Python would be in one."""
    return study.text or study.model_dump_json(indent=2, exclude_defaults=True)


def write_report(result: Result, *, figures: bool = False) -> Path:
    """Write the page, and the figures as files when asked; returns the page's path."""
    from nipc.answers.result import PAGE
    from nipc.report import save_figures, write_page

    if figures:
        save_figures(result.dataset, result.folder / "figures")
    return write_page(result.dataset, result.folder / PAGE)
