"""`nipc sweep`."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Annotated

import typer

from nipc.commands.options import AsJson, StudyFile
from nipc.commands.whatif import Members
from nipc.errors import InputError

if TYPE_CHECKING:
    import xarray as xr


def sweep(
    study: StudyFile,
    scales: Annotated[
        str, typer.Option(metavar="S,S,...", help="Factors of the noise, as 0.25,0.5,1,2.")
    ] = "0.25,0.5,1,2",
    source: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Only this source; else all noise sources together."),
    ] = None,
    members: Members = None,
    as_json: AsJson = False,
) -> None:
    """Answers over a range of noise intensities, and the orders of noise in them.

    Nothing is run: the expansions of the finished study answer. Order 0 is
    what is left without the noise, order 1 is linear in it, order 2 squared.
    """
    from nipc.questions import sweep as make
    from nipc.workflow import load_study

    try:
        factors = [float(part) for part in scales.split(",") if part.strip()]
    except ValueError:
        raise InputError(f"--scales {scales}: it reads S,S,..., as --scales 0.5,1,2") from None
    data = make(load_study(study), factors, source or [], members=members)
    if as_json:
        print(json.dumps(_told(data)))
    else:
        _show(data)


def _told(data: xr.Dataset) -> dict[str, object]:
    import math

    from nipc.answers.sweep import remarks

    last = data.isel(time=-1)

    def values(name: str, quantity: str) -> list[float | None]:
        found = [float(v) for v in last[name].sel(quantity=quantity).values]
        return [v if math.isfinite(v) else None for v in found]

    names = [
        f"{name}{end}"
        for name in ("mean", "std", "inside_probability", "survival_probability")
        for end in ("", "_low", "_high")
    ] + ["order_mean", "order_std", "beyond_linear"]
    return {
        "title": data.attrs["title"],
        "moved": data.attrs["moved"],
        "time": float(last["time"].item()),
        "scales": [float(s) for s in data["factor"].values],
        "far_share": [float(s) for s in data["far_share"].values],
        "remarks": remarks(data),
        "quantities": {
            str(q): {name: values(name, q) for name in names} for q in data["quantity"].values
        },
    }


def _show(data: xr.Dataset) -> None:
    import numpy as np
    from rich.table import Table
    from rich.text import Text

    from nipc.answers.sweep import remarks
    from nipc.answers.wording import estimate, number
    from nipc.terminal import console

    out = console()
    out.print(Text(data.attrs["title"], style="bold"))
    end = data.isel(time=-1)
    when = f"{number(float(end['time'].item()))} {data['time'].attrs['units']}".rstrip()
    out.print(Text(f"At {when}, {data.attrs['members']} members; scaled: {data.attrs['moved']}"))
    for name in data["quantity"].values:
        one = end.sel(quantity=name)
        boxed = bool(np.isfinite(one["inside_probability"].values).any())
        table = Table(box=None, pad_edge=False)
        heads = ["scale", "standard deviation", *["P(inside)"] * boxed, "order 2+", "far"]
        for head in heads:
            table.add_column(Text(head))
        unit = str(one["quantity_unit"].item())
        for k, factor in enumerate(data["factor"].values):
            row = one.isel(factor=k)
            cells = [number(float(factor))]
            for variable, label in [("std", unit), ("inside_probability", "")][: 1 + boxed]:
                value, low, high = (float(row[f"{variable}{e}"]) for e in ("", "_low", "_high"))
                cells.append(estimate(value, low, high, label))
            beyond = float(row["beyond_linear"].item())
            cells.append("-" if np.isnan(beyond) else f"{beyond:.2%}")
            cells.append(f"{float(data['far_share'][k]):.1%}")
            table.add_row(*map(Text, cells))
        out.print()
        out.print(Text(str(name), style="bold"))
        out.print(table)
        parts = [
            f"order {k}: {number(float(m), 6)} ± {number(float(s), 3)}"
            for k, (m, s) in enumerate(
                zip(one["order_mean"].values, one["order_std"].values, strict=True)
            )
        ]
        out.print(Text("at scale 1, " + "; ".join(parts)))
    out.print()
    for line in remarks(data):
        out.print(Text(f"- {line}"))
    out.print(
        Text(
            "order 2+: size of what is not linear in the noise, over the spread. far: members "
            "that pass outside what the runs cover. No run was made."
        )
    )
