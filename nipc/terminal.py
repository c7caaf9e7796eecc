"""What the terminal shows: tables and headlines, never wider than the window."""

from __future__ import annotations

import sys

from rich.console import Console
from rich.table import Table
from rich.text import Text

from nipc.answers.result import Result
from nipc.chain.plan import Plan
from nipc.problem.study import Study


def console() -> Console:
    """Standard output: coloured in a terminal, plain and 80 wide elsewhere."""
    return Console(width=None if sys.stdout.isatty() else 80, highlight=False)


def show_study(out: Console, study: Study) -> None:
    """What a study that has passed its checks is made of."""
    out.print(Text(study.title, style="bold"))
    clock = study.clock
    rows = [
        ("propagator", study.propagator.adapter),
        ("clock", f"{clock.start:g} to {clock.end:g} {clock.unit}, {clock.times.size} outputs"),
        ("state", ", ".join(study.state_names)),
        ("parameters", ", ".join(study.parameter_names) or "none"),
        ("noise sources", ", ".join(study.source_names) or "none"),
        (
            "quantities",
            ", ".join(q.name + (" (box)" if q.box else "") for q in study.quantity),
        ),
    ]
    table = Table.grid(padding=(0, 2))
    for name, value in rows:
        table.add_row(name, Text(value))
    out.print(table)


def show_plan(out: Console, plan: Plan, unit: str) -> None:
    """Germ variables, terms, runs, and what each noise basis would lose."""
    out.print(Text(plan.title, style="bold"))
    table = Table(title="Germ of one arc", title_justify="left", box=None, header_style="bold")
    for head, side in (("driver", "left"), ("kind", "left"), ("variables", "right")):
        table.add_column(head, justify=side)  # type: ignore[arg-type]
    for name, kind, count in plan.groups:
        table.add_row(Text(name), kind, str(count))
    out.print(table)
    runs = Table(title="Runs", title_justify="left", box=None, show_header=False)
    runs.add_column()
    runs.add_column(justify="right")
    for label, value in (
        ("arcs", plan.arcs),
        ("terms of an expansion", plan.terms),
        (f"design: {plan.design}", plan.design_runs),
        ("held-out check", plan.check_runs),
        ("together", plan.total_runs),
        ("budget", "none" if plan.budget is None else f"{plan.budget:g}"),
    ):
        runs.add_row(label, str(value))
    out.print(runs)
    if plan.losses:
        out.print(_losses(plan))
    for note in plan.notes:
        out.print(note)


def _losses(plan: Plan) -> Table:
    title = "Share of variance that a noise basis loses on one arc"
    table = Table(title=title, title_justify="left", box=None, header_style="bold")
    table.add_column("source")
    table.add_column("basis")
    for head in ("terms", "path", "end value", "response"):
        table.add_column(head, justify="right")
    for loss in plan.losses:
        response = "-" if loss.response_lost is None else f"{loss.response_lost:.1e}"
        table.add_row(
            Text(loss.source),
            loss.basis + (" *" if loss.chosen else ""),
            str(loss.terms),
            f"{loss.path_lost:.1e}",
            f"{loss.end_lost:.1e}",
            response,
        )
    table.caption = "* chosen; response: the velocity of an oscillator of the study's period"
    table.caption_justify = "left"
    return table


def show_result(out: Console, result: Result, page: str | None) -> None:
    """The findings, what they cost, and where everything is."""
    out.print(Text(str(result.dataset.attrs["title"]), style="bold"))
    for finding in result.findings:
        out.print(Text("- " + finding))
    failed = int(result.dataset.attrs.get("failed_runs", 0))
    if failed:
        out.print(Text(f"- {failed} runs failed: `nipc status` tells why.", style="bold"))
    out.print()
    where = [("data", result.folder / "results.nc"), ("figures", result.folder / "summary.json")]
    for label, path in where:
        out.print(Text(f"{label:8} {path}"), soft_wrap=True)
    if page is not None:
        out.print(Text(f"{'page':8} {page}"), soft_wrap=True)
