"""What the terminal shows: tables and headlines, never wider than the window."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from rich.console import Console
from rich.table import Table
from rich.text import Text

from nipc.answers.result import DATA, SUMMARY, Result
from nipc.chain.plan import Plan
from nipc.chain.records import ArcRecord, alike
from nipc.chart_choice import ChartChoice
from nipc.pilot import Pilot
from nipc.problem.study import Study
from nipc.report import reading
from nipc.report.headline import rows, split
from nipc.report.numbers import THIN, amount, percent, probability, with_spread
from nipc.runs.journey import duration
from nipc.runs.probe import ProbeReport

MARKS = {
    "†": "† past the trust horizon of single paths, the distribution still agrees",
    "‡": "‡ past every trust horizon, or not checked: do not rely on it",
}


def console() -> Console:
    """Standard output: coloured in a terminal, plain and 80 wide elsewhere."""
    return Console(width=None if sys.stdout.isatty() else 80, highlight=False)


def show_study(out: Console, study: Study) -> None:
    """What a study that has passed its checks is made of."""
    out.print(Text(study.title, style="bold"))
    table = Table.grid(padding=(0, 2))
    for head, lines in study.summary():
        table.add_row(head, Text("\n".join(lines)))
    out.print(table)


def show_plan(out: Console, plan: Plan) -> None:
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
    # a chain's degrees are known only as its arcs are built
    least = "at least " if isinstance(plan.arcs, int) and plan.arcs > 1 else ""
    for label, value in (
        ("arcs", plan.arcs),
        ("terms of an expansion", f"{least}{plan.terms}"),
        (f"design: {plan.design}", f"{least}{plan.design_runs}"),
        ("held-out check", f"{least}{plan.check_runs}"),
        ("together", f"{least}{plan.total_runs}"),
        ("budget", "none" if plan.budget is None else f"{plan.budget:g}"),
    ):
        runs.add_row(label, str(value))
    out.print(runs)
    if plan.losses:
        out.print(_losses(plan))
    for note in plan.notes:
        out.print(note)


def show_pilot(out: Console, pilot: Pilot) -> None:
    """What a few runs foretell of all of them."""
    if not np.isfinite(pilot.run_seconds):
        out.print(Text(f"All {pilot.made} pilot runs failed: {pilot.reason}", style="bold"))
        return
    table = Table(
        title=f"Foretold by {pilot.made} pilot runs", title_justify="left", box=None,
        show_header=False,
    )  # fmt: skip
    table.add_column()
    table.add_column(justify="right")
    runs = pilot.design_runs + pilot.check_runs
    about = "at least " if pilot.least else "about " if pilot.degrees is not None else ""
    rows = [("one run of one arc", duration(pilot.run_seconds))]
    if pilot.degrees is not None:
        low, high = pilot.degrees
        rows.append(("degrees of the arcs", str(low) if low == high else f"{low} to {high}"))
    rows += [
        ("runs in all", f"{about}{runs}"),
        ("as runs over the whole horizon", f"{about}{pilot.equivalents:.3g}"),
        (f"time with {pilot.jobs} at a time", f"{about}{duration(pilot.seconds)}"),
    ]
    for row in rows:
        table.add_row(*row)
    out.print(table)
    if pilot.failed:
        out.print(Text(f"{pilot.failed} of them failed, as: {pilot.reason}"))
    if pilot.degrees is not None:
        out.print(
            "The degrees follow from opposite members over the whole horizon by a rule of thumb; "
            "there may be several times as many runs, or as few."
        )
    elif pilot.least:
        out.print("It did not get through the whole horizon: this is a lower bound.")


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


def show_charts(out: Console, choice: ChartChoice) -> None:
    """How curved the motion is in each chart, and which to take."""
    title = f"Charts, tried on {choice.runs} runs over the horizon"
    table = Table(title=title, title_justify="left", box=None, header_style="bold")
    table.add_column("chart")
    table.add_column("curvature", justify="right")
    table.add_column("", overflow="fold")
    for tried in choice.tried:
        mark = "*" if tried.name == choice.own else " "
        curvature = "-" if tried.curvature is None else f"{tried.curvature:.1e}"
        table.add_row(f"{mark} {tried.name}", curvature, Text(tried.reason))
    table.caption = "* the study's; curvature: the part of the spread that is not linear"
    table.caption_justify = "left"
    out.print(table)
    if choice.best == choice.own:
        out.print(f"Keep {choice.own}: no other chart is clearly better.")
    else:
        out.print(Text(f'Better: [chart] name = "{choice.best}"', style="bold"))


def show_arcs(out: Console, records: Sequence[ArcRecord], unit: str) -> None:
    """The arcs built so far; neighbours that differ only in their errors share a row."""
    table = Table(title="Arcs", title_justify="left", box=None, header_style="bold")
    for head in (f"t / {unit}", "arcs", "degree", "terms", "runs", "error"):
        table.add_column(head, justify="left" if head.startswith("t /") else "right")
    table.add_column("why", overflow="fold")
    for group in alike(records):
        first, last = group[0], group[-1]
        worst = max(record.error for record in group)
        table.add_row(
            f"{first.start:.5g} to {last.end:.5g}", str(len(group)), str(first.degree),
            str(first.terms), str(first.runs), f"{worst:.1e}", Text(first.note),
        )  # fmt: skip
    out.print(table)


def show_probe(out: Console, report: ProbeReport) -> None:
    """What a probe found, topic by topic."""
    table = Table.grid(padding=(0, 1))
    for finding in report.findings:
        mark = Text("good") if finding.good else Text("LOOK", style="bold")
        told = f"{finding.topic}: {finding.found} {finding.advice}".rstrip()
        table.add_row(mark, Text(told))
    out.print(table)


def show_result(out: Console, result: Result, page: Path | None, study: str) -> None:
    """What each quantity does, what that rests on, and where everything is."""
    data = result.dataset
    out.print(Text(str(data.attrs["title"]), style="bold"))
    out.print(_answers(data))
    marks = {_mark(data, name) for name in reading.quantities(data)}
    legend = [text for mark, text in MARKS.items() if mark in marks]
    if legend:
        out.print(Text("; ".join(legend)))
    for sentence in [*_spreading(data), *_general(result), *_notes(data)]:
        out.print(_item(sentence))
    if int(data.attrs.get("failed_runs", 0)):
        out.print(_item(f"Why runs failed: nipc status {study}"))
    out.print()
    places = {"page": page, "data": result.folder / DATA, "summary": result.folder / SUMMARY}
    for label, path in places.items():
        if path is not None:
            out.print(Text(f"{label:8} {path}"), soft_wrap=True)


def _answers(data: xr.Dataset) -> Table:
    """One row a quantity, of the end of the horizon."""
    end = amount(float(reading.times(data)[-1]), reading.time_unit(data))
    table = Table(box=None, header_style="bold", padding=(0, 1))
    for head in (f"at {end}", "mean ± std", "stayed in box", "main driver", "trusted to"):
        table.add_column(head.replace(THIN, " "), overflow="fold")
    for row in rows(data):
        name = row.quantity
        mark = _mark(data, name)
        mean, std = (reading.last(data, key, name) for key in ("mean", "std"))
        stayed = reading.last(data, "survival_probability", name)
        driver = reading.main_driver(data, name)
        cells = [
            name,
            f"{with_spread(mean, std)} {row.unit}".rstrip() + mark,
            "-" if np.isnan(stayed) else probability(stayed) + mark,
            "-" if driver is None else f"{driver[0]} {percent(driver[1])}{mark}",
            row.cells[-1].main,
        ]
        table.add_row(*(Text(cell.replace(THIN, " ")) for cell in cells))
    for joint in reading.joints(data):
        found = reading.joint_series(data, "joint_survival_probability", joint)
        if found is not None:
            mark = reading.trust(data, None).mark(float(reading.times(data)[-1]))
            table.add_row(Text(joint), "", Text(probability(float(found[-1])) + mark))
    return table


def _mark(data: xr.Dataset, quantity: str) -> str:
    trust = reading.trust(data, quantity)
    return trust.mark(trust.end)


def _spreading(data: xr.Dataset) -> list[str]:
    """`Spreading of x: bounded; of energy: diffusive.`"""
    pairs = [(n, reading.text(data, "spreading_verdict", n)) for n in reading.quantities(data)]
    told = [f"of {name}: {verdict}" for name, verdict in pairs if verdict not in ("", "nan")]
    return [f"Spreading {'; '.join(told)}."] if told else []


def _general(result: Result) -> list[str]:
    """Findings on the whole study; those on one quantity end with its trust horizon in brackets."""
    return [text for text, clause in map(split, result.findings) if not clause]


def _notes(data: xr.Dataset) -> list[str]:
    return [str(note) for note in reading.listed(data, "notes") or []]


def _item(sentence: str) -> Table:
    table = Table.grid(padding=(0, 1))
    table.add_row("-", Text(sentence))
    return table
