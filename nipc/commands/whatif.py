"""`nipc whatif`."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Annotated, Any

import typer

from nipc.commands.options import AsJson, StudyFile
from nipc.errors import InputError

if TYPE_CHECKING:
    import xarray as xr

HIDDEN = ("quantile 0.25", "quantile 0.75")  # from the table; JSON has them

Scales = Annotated[
    list[str] | None,
    typer.Option(
        "--scale",
        metavar="NAME=FACTOR",
        help="Scale a noise source, the start or a parameter, as radial=0.5 or start=2; may be "
        "given several times.",
    ),
]
Boxes = Annotated[
    list[str] | None,
    typer.Option(
        "--box", metavar="QUANTITY=LOW:HIGH", help="Move a box, as longitude=-0.1:0.1 or x=:2."
    ),
]
At = Annotated[
    float | None, typer.Option(help="The time to tell of, in the clock's unit; else the end.")
]
Members = Annotated[
    int | None,
    typer.Option(min=2, help="Members of the ensemble that answer; else the study's."),
]


def whatif(
    study: StudyFile,
    scale: Scales = None,
    box: Boxes = None,
    at: At = None,
    members: Members = None,
    as_json: AsJson = False,
) -> None:
    """Scale noise sources or the start, or move boxes: what becomes of the answers.

    Nothing is run: the expansions of the finished study answer.
    """
    from nipc.questions import compared
    from nipc.workflow import load_study

    scales = dict(_scale(text) for text in scale or [])
    boxes = dict(_box(text) for text in box or [])
    now, was = compared(load_study(study), scales, boxes, members=members)
    told = _told(now, was, at) | {"scale": scales, "box": {k: list(v) for k, v in boxes.items()}}
    print(json.dumps(_plain(told))) if as_json else _show(told)


def _scale(text: str) -> tuple[str, float]:
    name, _, factor = text.rpartition("=")
    try:
        return name.strip() or _refuse(text), float(factor)
    except ValueError:
        return _refuse(text), 1.0


def _refuse(text: str) -> str:
    raise InputError(f"--scale {text}: it reads NAME=FACTOR, as --scale thrust=0.5")


def _box(text: str) -> tuple[str, tuple[float, float]]:
    name, _, ends = text.rpartition("=")
    low, colon, high = ends.partition(":")
    try:
        if not name or not colon:
            raise ValueError
        return name.strip(), (
            float(low) if low.strip() else float("-inf"),
            float(high) if high.strip() else float("inf"),
        )
    except ValueError:
        raise InputError(
            f"--box {text}: it reads QUANTITY=LOW:HIGH, as --box longitude=-0.1:0.1"
        ) from None


def _told(now: xr.Dataset, was: xr.Dataset, at: float | None) -> dict[str, Any]:
    """What is said of each quantity at a time: {name: [now, was]} for each figure."""
    import numpy as np

    from nipc.answers.whatif import remarks
    from nipc.report import reading

    times = now["time"].values
    index = times.size - 1 if at is None else int(np.argmin(np.abs(times - at)))
    quantities: dict[str, Any] = {}
    joints: dict[str, Any] = {}
    for name in now["quantity"].values:
        parts = [data.sel(quantity=name).isel(time=index) for data in (now, was)]
        figures: dict[str, list[Any]] = {}
        for variable in ("mean", "std", "inside_probability", "survival_probability"):
            values = [_triple(part, variable) for part in parts]
            if np.isfinite(values[0][0]):
                figures[variable] = values
        for level in now["level"].values:
            values = [_triple(part.sel(level=level), "quantile") for part in parts]
            figures[f"quantile {level:g}"] = values
        for source in now["source"].values:
            values = [_triple(part.sel(source=source), "driver_total") for part in parts]
            figures[f"total share of {source}"] = values
        mark = reading.trust(now, str(name)).mark(float(times[index]))
        unit = str(parts[0]["quantity_unit"].item())
        quantities[str(name)] = {"unit": unit, "mark": mark, "figures": figures}
    mark = reading.trust(now, None).mark(float(times[index]))
    for name in now["joint"].values if "joint" in now.coords else []:
        parts = [data.sel(joint=name).isel(time=index) for data in (now, was)]
        kinds = ("inside_probability", "survival_probability")
        figures = {v: [_triple(part, f"joint_{v}") for part in parts] for v in kinds}
        joints[str(name)] = {"unit": "", "mark": mark, "figures": figures}
    return {
        "title": now.attrs["title"],
        "time": float(times[index]),
        "time_unit": str(now["time"].attrs["units"]),
        "members": int(now.attrs["members"]),
        "far_share": float(now.attrs["far_share"]),
        "remarks": remarks(now),
        "quantities": quantities,
        "joint": joints,
    }


def _triple(part: xr.Dataset, variable: str) -> list[float]:
    """[value, low, high], NaN where there is none."""
    names = (variable, f"{variable}_low", f"{variable}_high")
    return [float(part[n].item()) if n in part else float("nan") for n in names]


def _plain(value: Any) -> Any:
    """JSON has no NaN and no infinity."""
    import math

    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, list):
        return [_plain(v) for v in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None if math.isnan(value) else ("inf" if value > 0 else "-inf")
    return value


def _show(told: dict[str, Any]) -> None:
    from rich.table import Table
    from rich.text import Text

    from nipc.terminal import MARKS, console

    out = console()
    out.print(Text(told["title"], style="bold"))
    changes = [f"{name} x {factor:g}" for name, factor in told["scale"].items()]
    changes += [f"box of {name} {low:g} to {high:g}" for name, (low, high) in told["box"].items()]
    when = f"At {told['time']:g} {told['time_unit']}".rstrip()
    out.print(Text(f"{when}, {told['members']} members; {', '.join(changes) or 'nothing changed'}"))
    marks = set()
    for name, one in (told["quantities"] | told["joint"]).items():
        table = Table(box=None, pad_edge=False)
        marks.add(one["mark"])
        for head in (Text(name + one["mark"], style="bold"), "now", "as the study stands"):
            table.add_column(head, overflow="fold")
        for figure, (now, was) in one["figures"].items():
            if figure in HIDDEN:
                continue
            spread = one["figures"].get("std", [[float("nan")]])[0][0]
            cells = [_cell(figure, values, one["unit"], spread) for values in (now, was)]
            table.add_row(Text(_label(figure)), *map(Text, cells))
        out.print()
        out.print(table)
    out.print()
    for line in told["remarks"]:
        out.print(Text(f"- {line}"))
    for mark in sorted(marks - {""}):
        out.print(Text(MARKS[mark]))
    out.print(Text("In brackets: 95 % intervals. No run was made."))


def _label(figure: str) -> str:
    if figure.startswith("quantile "):
        return f"{100 * float(figure.split()[1]):g} % are below"
    return {
        "std": "standard deviation",
        "inside_probability": "P(inside)",
        "survival_probability": "P(stayed inside)",
    }.get(figure, figure)


def _cell(figure: str, values: list[float], unit: str, spread: float) -> str:
    import math

    from nipc.answers.wording import estimate
    from nipc.report.numbers import THIN, beside, percent

    value, low, high = values
    if math.isnan(value):
        return "-"
    if figure.startswith("total share"):
        return f"{percent(value)} ({100 * low:.0f} to {100 * high:.0f})".replace(THIN, " ")
    if figure.startswith("quantile") and math.isnan(low):
        return f"{beside(value, spread)} {unit}".replace(THIN, "").rstrip()
    return estimate(value, low, high, "" if figure.endswith("probability") else unit)
