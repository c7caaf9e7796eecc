"""Study in, result out: the whole way, for Python and the command line alike."""

from __future__ import annotations

import json
import platform
import time
from collections import Counter
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
    from nipc.answers.result import Result
    from nipc.runs.outcomes import Outcomes
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

    germ = germ_of(study)
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


def run(
    study: Study,
    *,
    n_jobs: int = 1,
    folder: str | Path | None = None,
    progress: Progress | None = None,
    backend: str = "processes",
) -> Result:
    """Run the study: design, runs, expansion, check, answers.

    Runs that the ledger in the work folder already holds are not made again. Results are saved
    there and returned. `backend` "inline" runs the propagator in this process.
    """
    from nipc.answers.result import Result
    from nipc.answers.single import single_arc_table
    from nipc.answers.verdict import findings
    from nipc.chain.single_arc import solve
    from nipc.runs.engine import Engine, FailurePolicy
    from nipc.runs.ledger import Ledger
    from nipc.runs.progress import Silent

    began = time.monotonic()
    place = Path(folder) if folder is not None else work_folder(study)
    forecast = plan(study)
    propagator, quantities = build_propagator(study), build_quantities(study)
    policy = FailurePolicy(retries=study.runs.retries, tolerated=study.runs.tolerated_failures)
    with (
        Ledger.open(place) as ledger,
        Engine(
            propagator,
            ledger,
            n_jobs=n_jobs,
            time_limit=study.runs.time_limit,
            policy=policy,
            progress=progress or Silent(),
            backend=backend,
        ) as engine,
    ):
        ledger.expect(forecast.total_runs)
        arc = solve(study, engine, quantities)
        notes = [*ledger.notes, *engine.notes, *arc.notes]
    table = single_arc_table(arc)
    attributes = _provenance(study, arc.outcomes, began, n_jobs) | {
        "run_equivalents": float(forecast.total_runs),
        "notes": json.dumps(notes + list(forecast.notes)),
    }
    dataset = table.dataset(attributes)
    dataset.attrs["findings"] = json.dumps(findings(dataset))
    result = Result(dataset, place)
    result.save()
    return result


def _provenance(
    study: Study, outcomes: tuple[Outcomes, ...], began: float, n_jobs: int
) -> dict[str, Any]:
    """The attributes of a result: everything that tells where its numbers come from."""
    reasons = Counter(r for o in outcomes for r in o.reasons if r is not None)
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
        "failures": json.dumps([{"reason": r, "count": c} for r, c in reasons.most_common()]),
        "budget": study.budget if study.budget is not None else float("nan"),
        "members": study.ensemble.members,
        "wall_time": time.monotonic() - began,
        "workers": n_jobs,
        "study": study.text or study.model_dump_json(indent=2, exclude_defaults=True),
        "versions": json.dumps(versions),
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "monitoring_interval": float(steps.max(initial=0.0)),
    }


def report(result: Result, *, figures: bool = False) -> Path:
    """Write the page, and the figures as files when asked; returns the page's path."""
    from nipc.answers.result import PAGE
    from nipc.report import save_figures, write_page

    if figures:
        save_figures(result.dataset, result.folder / "figures")
    return write_page(result.dataset, result.folder / PAGE)
