"""`nipc allowance`."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Annotated

import typer

from nipc.commands.options import AsJson, Jobs, StudyFile, next_steps, progress_of, quoted
from nipc.commands.whatif import Members
from nipc.errors import InputError

if TYPE_CHECKING:
    import xarray as xr

    from nipc.answers.confirmation import Confirmed


def allowance(
    study: StudyFile,
    target: Annotated[float, typer.Option(help="The probability that must be kept.")] = 0.95,
    survival: Annotated[
        bool,
        typer.Option(
            "--survival",
            help="Of having stayed in the box at all output times; else of being in it at the end.",
        ),
    ] = False,
    box_of: Annotated[
        str | None, typer.Option(metavar="QUANTITY", help="Only the box of this quantity.")
    ] = None,
    confirm: Annotated[
        bool, typer.Option("--confirm", help="Make direct runs at each allowance found.")
    ] = False,
    runs: Annotated[int, typer.Option(min=2, help="Direct runs for each of them.")] = 20,
    members: Members = None,
    jobs: Jobs = 1,
    as_json: AsJson = False,
) -> None:
    """How strong each noise source, and the start, may be for a box to be kept.

    One at a time, all others as in the study; and all noise sources together.
    Nothing is run unless you ask to confirm, but some tens of passes of the
    ensemble take their time. The page tells what is found from then on.
    """
    from nipc.questions import find_allowances
    from nipc.workflow import load_study

    if jobs == 0:
        raise InputError("--jobs 0: give 1 or more, or -1 for one a processor")
    data, confirmed, kept = find_allowances(
        load_study(study),
        target,
        event="survival" if survival else "inside",
        box_of=box_of,
        members=members,
        confirming=runs if confirm else 0,
        n_jobs=jobs,
        progress=progress_of(as_json),
    )
    if as_json:
        print(json.dumps(_told(data, confirmed)))
        return
    _show(data, confirmed)
    if kept:
        next_steps(f"nipc report {quoted(study)}  # the page with it")


def _told(data: xr.Dataset, confirmed: list[Confirmed]) -> dict[str, object]:
    from dataclasses import asdict

    from nipc.answers.allowances import remarks
    from nipc.commands.whatif import _plain

    sources = {}
    for name in data["source"].values:
        part = data.sel(source=name)
        sources[str(name)] = {
            str(q): {
                key: float(part[key].sel(quantity=q).item())
                for key in part.data_vars
                if part[key].dims == ("quantity",) and not str(key).startswith("joint")
            }
            for q in data["quantity"].values
        }
    together = {
        str(q): [
            float(data[f"joint_allowance_scale{e}"].sel(quantity=q).item())
            for e in ("", "_low", "_high")
        ]
        for q in data["quantity"].values
    }
    told = {
        **{key: data.attrs[key] for key in ("title", "target", "event", "members")},
        "sources": sources,
        "all_noise_together": together,
        "confirmed": [asdict(one) for one in confirmed],
        "remarks": remarks(data),
    }
    return dict(_plain(told))


def _show(data: xr.Dataset, confirmed: list[Confirmed]) -> None:
    import numpy as np
    from rich.table import Table
    from rich.text import Text

    from nipc.answers.allowances import remarks
    from nipc.answers.wording import estimate
    from nipc.terminal import console

    out = console()
    out.print(Text(data.attrs["title"], style="bold"))
    goal = {"inside": "in the box at the end", "survival": "in the box at all output times"}
    out.print(
        Text(
            f"Largest strength for P({goal[data.attrs['event']]}) >= {data.attrs['target']:g}; "
            f"{data.attrs['members']} members"
        )
    )

    def cell(values: list[float], limit: float) -> str:
        if np.isnan(values[0]):
            return "not reachable"
        if np.isinf(values[0]):
            return f"more than {limit:.3g}"
        return estimate(values[0], values[1], values[2])

    for name in data["quantity"].values:
        part = data.sel(quantity=name)
        if np.isnan(part["allowance_limit"].values).all():
            continue
        table = Table(box=None, pad_edge=False)
        for head in (Text(str(name), style="bold"), "times its strength", "in the study's unit"):
            table.add_column(head)
        for source in data["source"].values:
            one = part.sel(source=source)
            limit = float(one["allowance_limit"].item())
            triple = [float(one[f"allowance_scale{e}"].item()) for e in ("", "_low", "_high")]
            absolute = float(one["allowance"].item())
            unit = str(one["source_unit"].item())
            known = np.isfinite(absolute) and str(one["source_kind"].item()) == "noise"
            table.add_row(
                Text(str(source)),
                Text(cell(triple, limit)),
                Text(f"{absolute:.3g} {unit}".rstrip() if known else ""),
            )
        joint = [float(part[f"joint_allowance_scale{e}"].item()) for e in ("", "_low", "_high")]
        if not np.isnan(joint).all() or (data["source_kind"] == "noise").sum() > 1:
            table.add_row(Text("all noise together"), Text(cell(joint, 8.0)), Text(""))
        out.print()
        out.print(table)
        _pairs(data, str(name))
    out.print()
    for line in [*remarks(data), *map(str, confirmed)]:
        out.print(Text(f"- {line}"))


def _pairs(data: xr.Dataset, name: str) -> None:
    """P with two noise sources scaled."""
    from rich.table import Table
    from rich.text import Text

    from nipc.report.numbers import probability
    from nipc.terminal import console

    if "pair_probability" not in data:
        return
    for k, pair in enumerate(data["pair"].values):
        one, two = str(pair).split(", ")
        part = data["pair_probability"].sel(quantity=name).values[k]
        table = Table(box=None, pad_edge=False)
        table.add_column(Text(f"P with {one} down, {two} across"))
        for t in data["second_scale"].values:
            table.add_column(Text(f"x {t:g}"))
        for i, s in enumerate(data["first_scale"].values):
            table.add_row(Text(f"x {s:g}"), *(Text(probability(float(p))) for p in part[i]))
        console().print(table)
